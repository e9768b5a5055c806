"""Drawing surface: one SVG a picture, the same bytes from the same numbers, text shown as it is written."""

from __future__ import annotations

import base64
import io
import re
import warnings
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.axis import Axis
    from matplotlib.figure import Figure

# Okabe & Ito (2008), Color Universal Design: told apart with any of the usual colour-vision deficiencies.
BLUE, VERMILION, GREEN, ORANGE, SKY = "#0072B2", "#D55E00", "#009E73", "#E69F00", "#56B4E9"
INK, MUTED, FAINT, PALE = "#1c2430", "#5b6675", "#c9cfd8", "#e9ecf1"

POINTS_PER_INCH = 72
"""One point of the picture is one CSS pixel of the page at full size."""

STYLE: dict[str, Any] = {
    "svg.fonttype": "none",
    "svg.hashsalt": "bayes-sys",
    "text.parse_math": False,
    "text.usetex": False,
    "axes.formatter.use_mathtext": False,
    "font.family": ["DejaVu Sans"],
    "font.size": 10,
    "axes.edgecolor": FAINT,
    "axes.linewidth": 0.8,
    "axes.labelcolor": MUTED,
    "axes.titlesize": 10,
    "text.color": INK,
    "xtick.color": MUTED,
    "ytick.color": MUTED,
    "xtick.labelsize": 9.5,
    "ytick.labelsize": 9.5,
    "xtick.major.size": 3,
    "ytick.major.size": 0,
    "figure.facecolor": "none",
    "axes.facecolor": "none",
    "path.simplify": True,
}
FONTS = (
    "system-ui, -apple-system, &quot;Segoe UI&quot;, Roboto, &quot;Helvetica Neue&quot;, Arial, sans-serif"
)


@dataclass(frozen=True)
class Picture:
    """One picture.

    Parameters
    ----------
    svg : str
    width, height : int
        CSS pixels at full size.
    alt : str
        What it shows, for a reader who cannot see it.
    """

    svg: str
    width: int
    height: int
    alt: str

    @property
    def source(self) -> str:
        """The picture as a data address."""
        return "data:image/svg+xml;base64," + base64.b64encode(self.svg.encode("utf-8")).decode("ascii")


def picture(width: int, height: int, draw: Callable[[Figure], None], alt: str) -> Picture:
    """Draw a picture of a size in CSS pixels."""
    import matplotlib as mpl
    from matplotlib.figure import Figure

    buffer = io.StringIO()
    style: Any = STYLE
    with mpl.rc_context(style), warnings.catch_warnings():
        # The reader's own fonts draw the text; that ours lack a letter matters only for measuring it.
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")
        figure = Figure(figsize=(width / POINTS_PER_INCH, height / POINTS_PER_INCH), dpi=POINTS_PER_INCH)
        draw(figure)
        nothing = {"Date": None, "Creator": None, "Format": None, "Type": None}
        figure.savefig(buffer, format="svg", metadata=nothing)
    return Picture(compact(buffer.getvalue()), width, height, alt)


def axes_at(figure: Figure, left: float, top: float, width: float, height: float) -> Axes:
    """Add axes at a place given in CSS pixels from the upper left corner."""
    total_width, total_height = (side * POINTS_PER_INCH for side in figure.get_size_inches())
    bottom = total_height - top - height
    axes = figure.add_axes(
        (left / total_width, bottom / total_height, width / total_width, height / total_height)
    )
    axes.spines[["top", "right"]].set_visible(False)
    return axes


def show_power(axes: Axes, axis: Axis, *, side: Literal["left", "right"]) -> None:
    """Write the power of ten that an axis leaves out of its labels above the axes, where nothing cuts it off."""
    axis.get_offset_text().set_visible(False)
    formatter = axis.get_major_formatter()
    formatter.set_locs(list(axis.get_majorticklocs()))
    power = formatter.get_offset()
    if power:
        place, text = 0.0 if side == "left" else 1.0, power if power[0] in "+\N{MINUS SIGN}-" else f"×{power}"
        axes.annotate(
            text,
            (place, 1.0),
            xycoords="axes fraction",
            xytext=(0, 2),
            textcoords="offset points",
            ha=side,
            va="baseline",
            fontsize=8.5,
            color=MUTED,
        )


def compact(svg: str) -> str:
    """Drop what nobody can see, and let the reader's own fonts stand in for ours.

    Only tags are touched: text between them, which comes from data, stays as it is.
    """
    svg = svg[svg.index("<svg") :]
    svg = re.sub(r"<!--.*?-->", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<[a-z][^>]*>", _compact_tag, svg)
    svg = re.sub(r">\s+<", "><", svg)
    return re.sub(r"(<use [^>]*/>){2,}", _share_style, svg)


def _share_style(found: re.Match[str]) -> str:
    """Say once what a run of markers looks like."""
    styles = set(re.findall(r' style="[^"]*"', found.group()))
    if len(styles) != 1:
        return found.group()
    (style,) = styles
    return f"<g{style}>{found.group().replace(style, '')}</g>"


def _compact_tag(found: re.Match[str]) -> str:
    tag = re.sub(r' transform="rotate\(-0 [^"]*"', "", found.group())
    tag = re.sub(r"font-family: 'DejaVu Sans'[^;\"]*", f"font-family: {FONTS}", tag)
    return re.sub(r"\s+", " ", re.sub(r"(\.\d\d)\d+", r"\1", tag))
