"""The page that answers first and shows its reasons: one self-contained HTML file."""

from __future__ import annotations

from srcfit.report.page import fragment, render

__all__ = ["fragment", "render"]
