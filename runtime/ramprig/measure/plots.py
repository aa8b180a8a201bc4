"""Draws the pictures of a measurement into files; matplotlib is loaded here and nowhere else, at the first picture."""

from __future__ import annotations

import io
from typing import TYPE_CHECKING

from ramprig.extras import need

from .findings import Picture

if TYPE_CHECKING:
    from matplotlib.figure import Figure

DPI = 120


def png(picture: Picture) -> bytes:
    """The picture as PNG. Raises PackageMissing without matplotlib."""
    module = need("matplotlib.figure", purpose="a plot")
    agg = need("matplotlib.backends.backend_agg", purpose="a plot")
    figure: Figure = module.Figure(figsize=(picture.width_in, picture.height_in), layout="constrained")
    agg.FigureCanvasAgg(figure)
    picture.draw(figure)
    out = io.BytesIO()
    figure.savefig(out, format="png", dpi=DPI, metadata={"Software": "ramprig"})
    return out.getvalue()
