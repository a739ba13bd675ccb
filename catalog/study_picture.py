"""The one picture of a study: what each plan held, what its rolls were worth, and the series that came of it.

Belongs here: drawing, and writing the file. Does not belong here: the figures (`study.py`). The drawing library is
imported only when a picture is asked for.
"""

import io
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np

from catalog.places import store_errors, write_whole
from catalog.study import Study
from contracts.compared import main_contract, whole_rolls
from contracts.errors import UsageError
from contracts.sessions import day_of

# Told apart by people who see red and green alike, and by their lightness in print
# (Okabe and Ito, Color Universal Design, 2008; the values from memory).
_COLOURS = ("#0072B2", "#E69F00", "#009E73", "#CC79A7", "#56B4E9", "#D55E00", "#000000", "#8C8C00")
_STROKES = ("-", "--", "-.", ":")
# Neighbouring contracts in two tones, a third where the same contract comes again.
_TONES = ("#5B7C99", "#C9D6E2")


def save_picture(study: Study, target: Path) -> None:
    """Write the study's picture as .svg or .png; raises UsageError for another ending, StoreError."""
    ending = target.suffix.lower().removeprefix(".")
    if ending not in ("svg", "png"):
        raise UsageError(f"{target}: seen the ending {target.suffix!r}; expected .svg or .png")
    content = draw_study(study, ending)
    with store_errors(f"{target} could not be written"):
        write_whole(target, content)


def draw_study(study: Study, ending: str) -> bytes:
    """The picture as bytes of an SVG or PNG; the same study gives the same bytes."""
    import matplotlib

    matplotlib.use("agg")
    from matplotlib import pyplot

    with matplotlib.rc_context(
        {"svg.hashsalt": "ropewalk", "font.size": 9, "axes.spines.top": False, "axes.spines.right": False}
    ):
        laid = [one for one in study.laid if one.series is not None]
        figure, panes = pyplot.subplots(
            4, 1, figsize=(11, 6.4 + 0.45 * len(laid)), sharex=True, layout="constrained",
            gridspec_kw={"height_ratios": [3.4, 2, 0.9 + 0.5 * len(laid), 2]},
        )  # fmt: skip
        try:
            days = np.array([day_of(day) for day in study.panel.sessions])
            _draw_series(panes[0], study, laid, days)
            _draw_apart(panes[1], laid, days)
            _draw_holdings(panes[2], study, laid, days)
            _draw_gaps(panes[3], study, laid, days)
            panes[3].set_xlim(days[0], days[-1])
            figure.suptitle(f"{study.market}: roll plans side by side, snapshot {study.snapshot}", ha="left", x=0.01)
            content = io.BytesIO()
            metadata = {"Date": None} if ending == "svg" else {}
            figure.savefig(content, format=ending, dpi=130, metadata=metadata)
        finally:
            pyplot.close(figure)
    return content.getvalue()


def _style(number: int) -> dict[str, Any]:
    return {"color": _COLOURS[number % len(_COLOURS)], "linestyle": _STROKES[number % len(_STROKES)]}


def _draw_series(pane: Any, study: Study, laid: list[Any], days: np.ndarray) -> None:
    for number, one in enumerate(laid):
        pane.plot(days[one.series.start :], one.series.back_adjusted, label=one.name, linewidth=1.1, **_style(number))
    pane.set_title("Back-adjusted price", loc="left", fontsize=9)
    pane.set_ylabel(study.panel.market.currency)
    pane.legend(frameon=False, ncols=min(4, len(laid)), loc="best")
    pane.grid(alpha=0.25)


def _draw_apart(pane: Any, laid: list[Any], days: np.ndarray) -> None:
    """What choosing another plan than the first would have made of the same history."""
    first = laid[0]
    for number, one in enumerate(laid):
        start = max(first.series.start, one.series.start)
        apart = one.series.back_adjusted[start - one.series.start :]
        apart = apart - first.series.back_adjusted[start - first.series.start :]
        pane.plot(days[start:], apart, linewidth=1.1, **_style(number))
    pane.set_title(f"Back-adjusted price less that of {first.name}", loc="left", fontsize=9)
    pane.grid(alpha=0.25)


def _draw_holdings(pane: Any, study: Study, laid: list[Any], days: np.ndarray) -> None:
    """A band a plan, its tone turning at each roll; the delivery month is written where there is room."""
    names = study.panel.contracts
    shares = {figures.plan: figures.volume_held for figures in study.figures}
    labels = []
    for number, one in enumerate(laid):
        main = main_contract(one.held)
        start = one.held.start
        edges = [start, *(np.flatnonzero(np.diff(main[start:])) + start + 1), len(main)]
        room = len(main) / 14
        for turn, (first, end) in enumerate(pairwise(edges)):
            left, right = days[first], days[min(end, len(days) - 1)]
            pane.barh(number, right - left, left=left, height=0.72, color=_TONES[turn % 2], linewidth=0)
            if end - first > room:
                colour = "white" if turn % 2 == 0 else "black"
                middle = left + (right - left) / 2
                pane.text(middle, number, names[main[first]][-7:], ha="center", va="center", fontsize=7, color=colour)
        held = shares.get(one.name)
        labels.append(one.name + (f"\n{held:.0%} of volume" if held is not None else ""))
    pane.set_yticks(range(len(laid)), labels)
    pane.invert_yaxis()
    pane.set_title("Contract held: the tone turns at each roll", loc="left", fontsize=9)


def _draw_gaps(pane: Any, study: Study, laid: list[Any], days: np.ndarray) -> None:
    tick = study.panel.market.tick_size
    for number, one in enumerate(laid):
        rolls = whole_rolls(one.held)
        at = [days[roll[-1].effective] for roll in rolls]
        sizes = [sum(step.gap for step in roll) / tick for roll in rolls]
        style = _style(number)
        pane.plot(at, sizes, "o^sDvP*X"[number % 8], color=style["color"], markersize=3.5, alpha=0.8, label=one.name)
    pane.axhline(0, color="black", linewidth=0.6)
    pane.set_title("Gap of each roll, in ticks", loc="left", fontsize=9)
    pane.set_ylabel("ticks")
    pane.grid(alpha=0.25)
