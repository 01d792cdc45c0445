"""Published and derived values beside the program's own.

``python -m tests.validation`` writes docs/validation.md anew; tests/test_validation.py judges every value
and the document.
"""
