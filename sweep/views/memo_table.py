"""The memo for people."""

from __future__ import annotations

from rich.console import Group, RenderableType

from sweep.query.memo import MemoFacts
from sweep.views.sheet import bytes_text, facts_table, line


def memo_view(facts: MemoFacts, removed: tuple[int, int] | None = None) -> RenderableType:
    """Where kept answers are and what they take.

    Parameters
    ----------
    facts
        What the memo holds now.
    removed
        Entries and bytes that were just removed; `None` when nothing was to be.
    """
    parts: list[RenderableType] = []
    if removed is not None:
        entries, held = removed
        answers = "1 answer" if entries == 1 else f"{entries:,} answers"
        parts.append(line(f"Cleared: {answers} removed, {bytes_text(held)} freed", "bold"))
    if not facts.enabled:
        parts.append(line("The memo is switched off by SWEEP_MEMO", "bold yellow"))
    elif not facts.writable:
        parts.append(line("Nothing can be kept there: its folder cannot be written", "bold yellow"))
    held_text = f"{bytes_text(facts.bytes)} of at most {bytes_text(facts.limit_bytes)}"
    rows = [("folder", str(facts.folder)), ("answers", f"{facts.entries:,}"), ("disk", held_text)]
    return Group(*parts, facts_table(rows))
