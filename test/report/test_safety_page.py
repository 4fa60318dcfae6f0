"""The safety page is what the loop's own tables say."""

from __future__ import annotations

from pathlib import Path

from ballbal_ros.report.safety_page import page


def test_the_page_is_current(root: Path):
    """docs/safety.md is what the tables give now; `python -m ballbal_ros.report.safety_page` writes it."""
    assert (root / "docs" / "safety.md").read_text(encoding="utf-8") == page()
