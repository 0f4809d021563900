"""What a notebook shows of a result: verdict, rules and a small picture, in our look."""

from __future__ import annotations

from base64 import b64encode
from collections.abc import Sequence
from html import escape
from io import BytesIO

from matplotlib.figure import Figure

from stillground.products.figures.badges import badge_of
from stillground.products.figures.sheet import INK, MUTED, PAPER, VERDICTS, our_look
from stillground.products.provenance import CAUTION
from stillground.protocols import Choice, Result

_CELL = "padding:1px 10px 1px 0;text-align:left;border:0;background:none;font-size:inherit"
_TABLE = "border-collapse:collapse;font-size:12px;line-height:1.35;margin:0;align-self:start"


def misfit(choice: Choice) -> str:
    """The misfit of a rule's answer: its own where that was recomputed, with that on the linearisation."""
    own = choice.chi_square_recomputed
    linear = f"{choice.chi_square:.3g}"
    return linear if own is None else f"{own:.3g} ({linear} on its last linearisation)"


def display(name: str, result: Result, picture: Figure, warnings: Sequence[str] = ()) -> str:
    """HTML without scripts or links that stands by itself in a cell's output.

    Parameters
    ----------
    name : str
        Of the profile.
    result : Result
    picture : Figure
        Of the answer.
    warnings : sequence of str
        What the run warns of.
    """
    small = BytesIO()
    with our_look():
        picture.savefig(small, format="png", dpi=96, metadata={"Software": None})
    verdict = result.ladder.verdict
    _, sign, colour = VERDICTS[verdict.word]
    said = f"{escape(name)}: {verdict.word}"
    head = "".join(f'<th style="{_CELL}">{text}</th>' for text in ("rule", "iteration", "misfit", ""))
    rows = "".join(_row(choice, choice is result.chosen) for choice in result.choices)
    told = "".join(f'<p style="margin:6px 0 0">warning: {escape(each)}</p>' for each in warnings)
    image = b64encode(small.getvalue()).decode()
    return (
        f'<div style="font:13px sans-serif;color:{INK};background:{PAPER};padding:8px;max-width:75em">'
        f'<p style="margin:0 0 6px"><b style="color:{colour}">{sign} {said}</b>. '
        f"{escape(verdict.reason[:1].upper() + verdict.reason[1:])}.</p>"
        f'<div style="display:flex;flex-wrap:wrap;gap:12px"><table style="{_TABLE}">'
        f"<tr>{head}</tr>{rows}</table>"
        f'<img src="data:image/png;base64,{image}" alt="{said}" style="max-width:36em;height:auto"></div>'
        f"{told}"
        f'<p style="margin:6px 0 0;color:{MUTED};font-size:11px">{escape(CAUTION)}</p></div>'
    )


def _row(choice: Choice, chosen: bool) -> str:
    badge = badge_of(choice.rule)
    iteration = "none" if choice.pick.iteration is None else f"{choice.pick.iteration:.3g}"
    cells = (
        f'<b style="color:{badge.colour}">{escape(badge.letter)}</b> {escape(choice.rule)}'
        + (" (chosen)" if chosen else ""),
        iteration,
        misfit(choice),
        "firm" if choice.pick.firm else "weak",
    )
    tip = escape(choice.pick.reason, quote=True)
    return f'<tr title="{tip}">' + "".join(f'<td style="{_CELL}">{cell}</td>' for cell in cells) + "</tr>"
