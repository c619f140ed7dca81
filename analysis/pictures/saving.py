"""Figures to files and into a page."""

from __future__ import annotations

import base64
import io
import re
import warnings
from pathlib import Path

from matplotlib.figure import Figure

from darkedge.analysis.files.atomic import make_folder, write_atomic
from darkedge.analysis.pictures.style import look

DPI = 220
"""Fine enough for print at the size a figure is drawn for."""


def save_png(figure: Figure, folder: Path, name: str) -> Path:
    """Save a figure as PNG under a safe name, making the folder where it is not there; returns the path.

    Raises
    ------
    InputError
        The folder cannot be made or written to.
    """
    make_folder(folder)
    path = folder / f"{safe_name(name)}.png"
    write_atomic(path, _drawn(figure, format="png", dpi=DPI))
    return path


def safe_name(name: str) -> str:
    """A file name made of letters, digits, dash, dot and underscore."""
    return re.sub(r"[^\w.-]+", "_", name).strip("_.") or "plot"


def as_data_uri(figure: Figure) -> str:
    """The figure as an SVG data URI, for an `img` of a page that needs no network."""
    svg = _drawn(figure, format="svg", metadata={"Date": None})
    return "data:image/svg+xml;base64," + base64.b64encode(svg).decode("ascii")


def _drawn(figure: Figure, **how: object) -> bytes:
    """The bytes of a figure. Names in a script that the font lacks are shown as boxes; that is no reason to warn."""
    stream = io.BytesIO()
    with look(), warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        # Laid out once and then held: saving would work the layout out twice, which is half of the time.
        figure.draw_without_rendering()
        figure.set_layout_engine("none")
        figure.savefig(stream, **how)  # type: ignore[arg-type]
    return stream.getvalue()
