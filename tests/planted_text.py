"""Texts with a planted fault whose place is counted apart from any checker."""

from __future__ import annotations

MARK = "§"
"""Stands in a planted text where the problem must be reported; taken out before the check."""


def plant(text: str, old: str, new: str) -> tuple[str, int, int]:
    """Text with the fault, and the line and column of the mark; 0, 0 without a mark."""
    assert text.count(old) == 1, f"{old!r} stands {text.count(old)} times"
    marked = text.replace(old, new)
    before, mark, _ = marked.partition(MARK)
    if not mark:
        return marked, 0, 0
    return marked.replace(MARK, ""), before.count("\n") + 1, len(before.rpartition("\n")[2]) + 1
