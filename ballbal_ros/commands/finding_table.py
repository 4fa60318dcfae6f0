"""Findings as a table for a person."""

from __future__ import annotations

from collections.abc import Sequence

from rich import box
from rich.markup import escape
from rich.table import Table

from ballbal_ros.findings import LOOK, OK, WRONG, Finding

COLOURS = {OK: "green", LOOK: "yellow", WRONG: "bold red"}


def finding_table(findings: Sequence[Finding], heading: bool = True) -> Table:
    """A line for each finding, what would do below it; areas are set apart. The verdict shows by colour and by word."""
    table = Table(box=box.SIMPLE_HEAD if heading else None, show_header=heading, pad_edge=False)
    table.add_column("", no_wrap=True)
    table.add_column("what", style="cyan")
    table.add_column("found, and what would do", overflow="fold")
    area = ""
    for finding in findings:
        if finding.area != area and area:
            table.add_section()
        area = finding.area
        line = escape(finding.found)
        if finding.do:
            line += f"\n[dim]→[/dim] {escape(finding.do)}"
        colour = COLOURS[finding.verdict]
        what = escape(finding.what) if heading else f"{escape(finding.area)} {escape(finding.what)}"
        table.add_row(f"[{colour}]{finding.verdict}[/{colour}]", what, line)
    return table
