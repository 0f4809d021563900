"""A sheet: our style, a heading that never overflows, panels placed in inches, and saving to bytes
that come out the same each time.

Places are fixed rather than negotiated by a layout engine, which would cost more than the drawing.
"""

from __future__ import annotations

import functools
import re
import warnings
from bisect import bisect_right
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import ParamSpec

from matplotlib import style
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.lines import Line2D
from matplotlib.textpath import text_to_path

from stillground.products.provenance import CAUTION
from stillground.protocols import Word
from stillground.whole import whole

STYLE = Path(__file__).parents[1] / "stillground.mplstyle"
INK, MUTED, LINE, PAPER, TEAL, RUST = "#18232e", "#52606d", "#3b4753", "#f6f4ee", "#155e63", "#a33a12"

# Shape, sign and colour: a verdict never hangs on colour alone.
VERDICTS: dict[Word, tuple[str, str, str]] = {
    "settled": ("o", "✓", TEAL),
    "drifting": ("^", "~", RUST),
    "undecided": ("D", "?", "#6a5200"),
}

HEADING, FOOT, MARGIN = 0.82, 0.36, 0.2
"""Heights that `sheet` keeps free above and below the panels, and the edge all round, inches."""

Arguments = ParamSpec("Arguments")


@contextmanager
def our_look() -> Iterator[None]:
    """Our style, whatever the user's own settings."""
    with style.context(STYLE, after_reset=True), warnings.catch_warnings():
        # A title in a script that the font lacks shows boxes; that is no fault of the run.
        warnings.filterwarnings("ignore", message="Glyph .* missing from font")
        yield


def styled(draw: Callable[Arguments, Figure]) -> Callable[Arguments, Figure]:
    """Let a figure's function draw in our look."""

    @functools.wraps(draw)
    def drawn(*args: Arguments.args, **kwargs: Arguments.kwargs) -> Figure:
        with our_look():
            return draw(*args, **kwargs)

    return drawn


def sheet(width: float, height: float, title: str, line: str, verdict: Word | None = None) -> Figure:
    """An empty figure with its heading and the caution at its foot.

    Parameters
    ----------
    width, height : float
        Of the whole figure, inches.
    title, line : str
        Cut to one and two lines of the sheet's width.
    verdict : str, optional
        Drawn as a sign before the title.
    """
    figure = Figure(figsize=(width, height))
    FigureCanvasAgg(figure)
    left = MARGIN
    if verdict is not None:
        marker, sign, colour = VERDICTS[verdict]
        at = ((MARGIN + 0.15) / width, 1 - 0.42 / height)
        figure.add_artist(Line2D([at[0]], [at[1]], marker=marker, ms=18, mfc=colour, mec=colour))
        figure.text(*at, sign, color="white", size=12, weight="bold", ha="center", va="center_baseline")
        left += 0.48
    room = (width - left - MARGIN) * 72
    for up, size, weight, colour, n_lines, text in (
        (0.17, 11, "bold", INK, 1, title),
        (0.4, 8, "normal", MUTED, 2, line),
    ):
        shown = fitted(text, size, weight, room, n_lines)
        figure.text(left / width, 1 - up / height, shown, size=size, weight=weight, color=colour, va="top")
    foot = fitted(CAUTION, 6, "normal", (width - 2 * MARGIN) * 72, 2)
    figure.text(MARGIN / width, 0.09 / height, foot, size=6, color=MUTED, ha="left", va="bottom")
    return figure


def panel(figure: Figure, left: float, bottom: float, width: float, height: float) -> Axes:
    """Axes whose frame has this place on the sheet, inches from its lower left corner."""
    across, up = figure.get_size_inches()
    return figure.add_axes((left / across, bottom / up, width / across, height / up))


def fitted(text: str, size: float, weight: str, room: float, n_lines: int) -> str:
    """The text in at most ``n_lines`` lines of ``room`` points, cut with an ellipsis where it must be."""
    font = FontProperties(family="DejaVu Sans", size=size, weight=weight)

    def width(shown: str) -> float:
        return float(text_to_path.get_text_width_height_descent(shown, font, ismath=False)[0])

    def longest(line: str, ending: str) -> int:
        """How many characters of the line fit, with the ending after them."""
        return bisect_right(range(1, len(line) + 1), room, key=lambda n: width(line[:n] + ending))

    # Not at spaces that hold a unit together.
    rest = re.sub(r"[ \n\t]+", " ", text).strip(" ")
    lines: list[str] = []
    while longest(rest, "") < len(rest):
        if len(lines) == n_lines - 1:
            rest = rest[: longest(rest, "…")].rstrip() + "…"
            break
        end = longest(rest, "")
        blank = rest.rfind(" ", 1, end + 1)
        end = blank if blank > 0 else end
        lines.append(rest[:end])
        rest = rest[end:].lstrip()
    return "\n".join([*lines, rest])


def write_figure(folder: Path, name: str, figure: Figure) -> tuple[Path, Path]:
    """Write ``<name>.png`` and ``<name>.pdf`` into ``folder``, the same bytes each time.

    Raises
    ------
    OutputError
        When the place cannot be written.
    """
    png, pdf = folder / f"{name}.png", folder / f"{name}.pdf"
    with our_look():
        with whole(png) as temporary:
            said = {"Software": None, "Title": name, "Comment": CAUTION}
            # Half the time of the default level for a tenth more bytes.
            figure.savefig(temporary, format="png", metadata=said, pil_kwargs={"compress_level": 3})
        with whole(pdf) as temporary:
            said = {"CreationDate": None, "Title": name, "Subject": CAUTION}
            figure.savefig(temporary, format="pdf", metadata=said)
    return png, pdf
