"""The report as one HTML page: self-contained, readable without script, on screen and on paper."""

from __future__ import annotations

import base64
from pathlib import Path

from jinja2 import Environment, FileSystemLoader, StrictUndefined

from reconcile.report.blocks import Report, as_data

_TEMPLATES = Path(__file__).parent


def write_page(report: Report, figures: Path, path: Path) -> None:
    """Write report.html; `figures` is the folder of the figures' files, which are put inside the page."""
    environment = Environment(
        loader=FileSystemLoader(_TEMPLATES, encoding="utf-8"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    environment.filters["inline"] = lambda block: _inline(figures, block["vector"] or block["raster"])
    text = environment.get_template("page.html").render(report=as_data(report))
    path.write_text(text, encoding="utf-8", newline="\n")


def _inline(folder: Path, name: str) -> str:
    """Return a figure's file as a data address."""
    kind = "image/svg+xml" if name.endswith(".svg") else "image/png"
    return f"data:{kind};base64,{base64.b64encode((folder / name).read_bytes()).decode('ascii')}"
