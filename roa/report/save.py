"""Figures as files: PNG and SVG, the same bytes whenever the same figure is saved."""

from __future__ import annotations

from io import BytesIO
from pathlib import Path

from matplotlib.figure import Figure

from roa.report.style import settings
from roa.sweep.run_folder import write_atomically

DOTS_PER_INCH = 200


def png_bytes(figure: Figure) -> bytes:
    """The figure as PNG at 200 dots an inch, without software name or date."""
    return _bytes(figure, "png", {"Software": None})


def svg_bytes(figure: Figure) -> bytes:
    """The figure as SVG with letters as paths, so that it looks alike on every machine; no date."""
    return _bytes(figure, "svg", {"Date": None, "Creator": None})


def save(figure: Figure, folder: Path, name: str) -> tuple[Path, Path]:
    """Write `name.png` and `name.svg` into the folder, whole or not at all, and return their paths."""
    png, svg = folder / f"{name}.png", folder / f"{name}.svg"
    write_atomically(png, png_bytes(figure))
    write_atomically(svg, svg_bytes(figure))
    return png, svg


def _bytes(figure: Figure, kind: str, metadata: dict[str, None]) -> bytes:
    target = BytesIO()
    with settings():
        figure.savefig(target, format=kind, dpi=DOTS_PER_INCH, metadata=metadata)
    return target.getvalue()
