"""`python -m fhirgallop.reasoning`: checks the shipped rule files and compiles them for a quick start."""

from __future__ import annotations

import sys

from fhirgallop.reasoning.rulebook import COMPILED, check_text, compiled_text, shipped_texts


def main() -> int:
    """Prints every fault, or writes rules/compiled.json."""
    issues = check_text(shipped_texts())
    for issue in issues:
        sys.stdout.write(f"{issue}\n")
    if not issues:
        COMPILED.write_text(compiled_text(), encoding="utf-8")
    return int(bool(issues))


if __name__ == "__main__":
    raise SystemExit(main())
