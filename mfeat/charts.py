"""Drawing: charts of comparisons, with matplotlib, which is imported when it is needed.

Colours are told apart by colour-blind readers (M. Okabe and K. Ito, Color universal design, 2008,
from memory) and stand with markers and dashes of their own, so that grey prints can be read.
"""

import io
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np

#: Of the descriptor that others are compared with; of the others in turn.
OWN_COLOUR = "#0b3d91"
OTHER_COLOURS = ("#d55e00", "#009e73", "#cc79a7", "#e69f00", "#56b4e9", "#7a7a7a")
_MARKERS = "os^vDPX*<>"
_DASHES = ((4, 1.5), (1, 1), (5, 1, 1, 1), (2, 1), (7, 2))


class Line(NamedTuple):
    """A descriptor in a chart: values with intervals over common places.

    `low` and `high` may be None; `own` is True for the one that others are compared with.
    """

    name: str
    values: np.ndarray
    low: np.ndarray | None
    high: np.ndarray | None
    own: bool


def require_matplotlib() -> Any:
    """Return `matplotlib.figure.Figure`.

    Raises
    ------
    ImportError
        With what to install.
    """
    try:
        from matplotlib.figure import Figure
    except ImportError:
        raise ImportError(
            "charts need matplotlib: python -m pip install matplotlib (or mfeat with [charts])"
        ) from None
    return Figure


def _plain(name: str) -> str:
    """Return a name as it is shown as it is: matplotlib reads what stands between $ as formula."""
    return name.replace("$", r"\$")


def _axes(width: float, height: float) -> tuple[Any, Any]:
    figure = require_matplotlib()(figsize=(width, height), layout="constrained")
    axes = figure.add_subplot()
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    axes.grid(axis="y", color="#e3e3e3", linewidth=0.8)
    axes.set_axisbelow(True)
    return figure, axes


def _style(k: int, own: bool) -> dict[str, Any]:
    if own:
        return {"color": OWN_COLOUR, "marker": "o", "linewidth": 2.6, "markersize": 7, "zorder": 5}
    return {
        "color": OTHER_COLOURS[k % len(OTHER_COLOURS)], "marker": _MARKERS[k % len(_MARKERS)],
        "linewidth": 1.3, "markersize": 5, "dashes": _DASHES[k % len(_DASHES)],
        "markerfacecolor": "white",
    }  # fmt: skip


def draw_lines(
    lines: Sequence[Line], places: Sequence[str], across: str, upward: str = "balanced accuracy"
) -> Any:
    """Draw descriptors as lines over places, e.g. conditions or training sizes.

    Returns the matplotlib figure; the legend lists the best first.
    """
    figure, axes = _axes(8.6, 4.4)
    x = np.arange(len(places))
    others, handles = 0, []
    for line in lines:
        style = _style(others, line.own)
        others += not line.own
        handles += axes.plot(x, line.values, label=line.name, **style)
        if line.own and line.low is not None:
            axes.fill_between(x, line.low, line.high, color=OWN_COLOUR, alpha=0.15, linewidth=0)
    axes.set_xticks(x, places)
    axes.set_xlabel(across)
    axes.set_ylabel(upward)
    axes.margins(x=0.03)
    values = np.concatenate([line.values for line in lines])
    if np.isfinite(values).any():  # intervals may reach beyond what an accuracy can be
        low, high = float(np.nanmin(values)), float(np.nanmax(values))
        axes.set_ylim(max(low - 0.05, -0.005), min(high + 0.05, 1.005))
    order = np.argsort([-np.nan_to_num(np.mean(line.values), nan=-1.0) for line in lines])
    axes.legend(  # named here: matplotlib leaves labels out that begin with "_"
        [handles[k] for k in order], [_plain(lines[k].name) for k in order], frameon=False,
        loc="center left", bbox_to_anchor=(1.0, 0.5), handlelength=3.4,
    )  # fmt: skip
    return figure


def draw_costs(
    names: Sequence[str], cost: np.ndarray, accuracy: np.ndarray, own: str, across: str
) -> Any:
    """Draw accuracy against a cost on a logarithmic axis, each point with its name."""
    figure, axes = _axes(7.2, 4.4)
    axes.grid(axis="x", color="#efefef", linewidth=0.8)
    others = 0
    for name, x, y in zip(names, cost, accuracy, strict=True):
        style = _style(others, name == own)
        others += name != own
        for unwanted in ("dashes", "linewidth"):
            style.pop(unwanted, None)
        axes.plot([x], [y], linestyle="none", **style | {"markersize": 9})
        axes.annotate(_plain(name), (x, y), xytext=(8, 5), textcoords="offset points", fontsize=9,
                      color="#222222", weight="bold" if name == own else "normal")  # fmt: skip
    axes.set_xscale("log")
    axes.set_xlabel(across)
    axes.set_ylabel("balanced accuracy, mean over conditions")
    axes.margins(0.18, 0.12)
    return figure


def draw_bars(
    names: Sequence[str], values: np.ndarray, low: np.ndarray, high: np.ndarray, across: str
) -> Any:
    """Draw horizontal bars with intervals about zero, the first on top."""
    figure, axes = _axes(7.6, 1.2 + 0.27 * len(names))
    axes.grid(visible=False)
    axes.grid(axis="x", color="#e3e3e3", linewidth=0.8)
    y = np.arange(len(names))[::-1]
    colours = [OWN_COLOUR if value >= 0 else OTHER_COLOURS[0] for value in values]
    hatch = [None if value >= 0 else "///" for value in values]
    for row, value, colour, lines in zip(y, values, colours, hatch, strict=True):
        axes.barh(row, value, height=0.66, color=colour, alpha=0.75, hatch=lines,
                  edgecolor="white")  # fmt: skip
    reach = np.nan_to_num(np.stack([values - low, high - values]))
    axes.errorbar(values, y, xerr=reach, fmt="none", ecolor="#222222", elinewidth=1, capsize=2)
    axes.set_yticks(y, [_plain(name) for name in names])
    axes.axvline(0.0, color="#222222", linewidth=1)
    axes.set_xlabel(_plain(across))
    axes.margins(y=0.02)
    return figure


def _settle(figure: Any) -> None:
    """Lay a figure out once and for all: every drawing would move it a little."""
    if figure.get_layout_engine() is not None:
        figure.draw_without_rendering()
        figure.set_layout_engine("none")


def as_svg(figure: Any) -> bytes:
    """Return a figure as SVG; the same figure gives the same bytes."""
    import matplotlib

    _settle(figure)
    stream = io.BytesIO()
    with matplotlib.rc_context({"svg.fonttype": "none", "svg.hashsalt": "mfeat"}):
        figure.savefig(stream, format="svg", metadata={"Date": None})
    return stream.getvalue()


def as_png(figure: Any) -> bytes:
    """Return a figure as PNG."""
    _settle(figure)
    stream = io.BytesIO()
    figure.savefig(stream, format="png", dpi=120, metadata={"Software": None})
    return stream.getvalue()
