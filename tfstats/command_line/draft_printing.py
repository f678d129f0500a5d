"""What `tfstats draft` shows: the variables of the files, and what is left to do."""

from __future__ import annotations

from pathlib import Path

from tfstats.command_line.terminal import Terminal
from tfstats.plan_file.drafted_plan import Draft

__all__ = ["print_draft"]

SEPARATOR = " x "


def print_draft(terminal: Terminal, draft: Draft, out: Path) -> None:
    """Tables first, then remarks, then the plan's path and its blanks."""
    opened = len(draft.contents)
    for number, contents in enumerate(draft.contents):
        if number and [(one.name, one.kind) for one in contents.arrays] == [
            (one.name, one.kind) for one in draft.contents[0].arrays
        ]:
            terminal.say(f"{contents.path}: the same variables")
            continue
        terminal.say(str(contents.path))
        rows: list[tuple[str, ...]] = [("variable", "shape", "kind", "looks like")]
        rows += [
            (one.name, SEPARATOR.join(map(str, one.shape)) or "1", one.kind, one.meaning) for one in contents.arrays
        ]
        terminal.table(rows)
    if draft.files > opened:
        terminal.say(f"{draft.files - opened} more power files were not opened.")
    for table in draft.tables:
        columns = ", ".join(map(str, table.table.columns))
        role = "no known kind of table" if table.role == "unknown" else f"a table of {table.role}"
        terminal.say(f"{table.path}: {role}, {len(table.table)} rows ({columns})")
    for remark in draft.remarks:
        terminal.say(f"mind: {remark}")
    if draft.trial:
        terminal.say(draft.trial)
    blanks = "1 blank" if draft.blanks == 1 else f"{draft.blanks} blanks"
    terminal.say(f"Wrote {out}, with {blanks} to fill in; tfstats check {out} names what is missing.")
