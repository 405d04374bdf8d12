"""The findings as one HTML page: what the terminal shows, in a browser."""

from __future__ import annotations

from html import escape
from pathlib import Path

from ..report.html import of_terminal, page
from .findings import Findings
from .terminal import parts

WIDTH = 160
"""Columns the matrix of suitability may take before it is split."""


def write_page(findings: Findings, path: Path, title: str) -> None:
    """Write the page.

    Raises:
        OSError: The file cannot be written.
    """
    body = [f"<h1>Preflight of {escape(title)}</h1>"]
    body += [of_terminal(part) for part in parts(findings, WIDTH)]
    path.write_text(page(f"Preflight of {title}", body), "utf-8")
