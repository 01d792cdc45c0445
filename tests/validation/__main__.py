"""Write docs/validation.md anew: ``python -m tests.validation`` from the top of the project."""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent.parent))  # where the tests find each other

from validation import document
from validation.collection import everything


def main() -> int:
    """Returns 1 (and writes nothing) where a value is off."""
    wrong = [check.id for check in everything() if not check.holds(check.find())]
    if wrong:
        sys.stderr.write(f"off, so nothing was written: {'; '.join(wrong)}\n")
        return 1
    document.PATH.write_text("\n".join(document.lines()) + "\n", encoding="utf-8")
    sys.stdout.write(f"wrote {document.PATH.name}: {len(everything())} checks\n")
    return 0


if __name__ == "__main__":
    sys.exit(main())
