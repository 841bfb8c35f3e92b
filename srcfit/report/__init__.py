"""The page that answers first and shows its reasons: one self-contained HTML file."""

from __future__ import annotations

from srcfit.report.change import change_fragment, render_change
from srcfit.report.page import fragment, render

__all__ = ["change_fragment", "fragment", "render", "render_change"]
