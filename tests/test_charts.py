"""Charts: what is drawn is what was given, and drawing leaves nothing behind."""

import sys
from xml.etree import ElementTree

import numpy as np
import pytest
from matplotlib import _pylab_helpers, colors
from matplotlib.figure import Figure

from mfeat import charts
from mfeat.charts import Line, as_png, as_svg, draw_bars, draw_costs, draw_lines

PLACES = ["clean", "noise", "blur"]


def lines(*names, own="ours"):
    rng = np.random.default_rng(0)
    found = []
    for name in names:
        values = rng.uniform(0.4, 0.9, 3)
        found.append(Line(name, values, values - 0.1, values + 0.05, name == own))
    return found


def legend_of(figure):
    return [text.get_text() for text in figure.axes[0].get_legend().get_texts()]


def test_lines_are_the_values():
    given = lines("b", "ours", "c")
    figure = draw_lines(given, PLACES, "condition", "upward")
    [axes] = figure.axes
    assert len(axes.lines) == 3
    for drawn, line in zip(axes.lines, given, strict=True):
        np.testing.assert_array_equal(drawn.get_xdata(), [0, 1, 2])
        np.testing.assert_array_equal(drawn.get_ydata(), line.values)
    assert [tick.get_text() for tick in axes.get_xticklabels()] == PLACES
    assert (axes.get_xlabel(), axes.get_ylabel()) == ("condition", "upward")
    best_first = sorted(given, key=lambda line: -line.values.mean())
    assert legend_of(figure) == [line.name for line in best_first]
    drawn = dict(zip(legend_of(figure), axes.get_legend().get_lines(), strict=True))
    for line, one in zip(given, axes.lines, strict=True):
        assert drawn[line.name].get_color() == one.get_color()
        assert drawn[line.name].get_marker() == one.get_marker()


def test_the_band_is_the_interval_of_the_reference_alone():
    given = lines("b", "ours")
    [axes] = draw_lines(given, PLACES, "x").axes
    [band] = axes.collections
    corners = band.get_paths()[0].vertices
    for k, (low, high) in enumerate(zip(given[1].low, given[1].high, strict=True)):
        own = corners[corners[:, 0] == k][:, 1]
        assert (own.min(), own.max()) == (low, high)
    bare = [line._replace(low=None, high=None) for line in given]
    assert not draw_lines(bare, PLACES, "x").axes[0].collections


def test_each_line_can_be_told_without_its_colour():
    names = [f"d{k}" for k in range(9)]
    drawn = draw_lines(lines("ours", *names), PLACES, "x").axes[0].lines
    looks = {(one.get_marker(), one._unscaled_dash_pattern[1] and
              tuple(one._unscaled_dash_pattern[1])) for one in drawn}  # fmt: skip
    assert len(looks) == 10
    assert drawn[0].get_color() == charts.OWN_COLOUR
    assert charts.OWN_COLOUR not in {one.get_color() for one in drawn[1:]}
    assert drawn[0].get_linewidth() > max(one.get_linewidth() for one in drawn[1:])


def test_lines_with_gaps_and_none_at_all(caplog):
    gone = Line("gone", np.full(3, np.nan), np.full(3, np.nan), np.full(3, np.nan), True)
    some = Line("some", np.array([0.5, np.nan, 0.7]), None, None, False)
    figure = draw_lines([gone, some], PLACES, "x")
    np.testing.assert_array_equal(figure.axes[0].lines[1].get_ydata(), some.values)
    assert set(legend_of(figure)) == {"gone", "some"}
    for other in (figure, draw_lines([gone], PLACES, "x")):
        assert as_png(other)
        assert as_svg(other)
    assert not caplog.records


def test_perfect_lines_are_not_cut():
    one = Line("ours", np.ones(3), np.ones(3), np.ones(3), True)
    [axes] = draw_lines([one], PLACES, "x").axes
    assert 1.0 < axes.get_ylim()[1] < 1.02


def test_costs_are_points_with_names():
    names, cost, accuracy = ["b", "ours"], np.array([12.0, 300.0]), np.array([0.7, 0.8])
    [axes] = draw_costs(names, cost, accuracy, "ours", "microseconds").axes
    assert [(one.get_xdata()[0], one.get_ydata()[0]) for one in axes.lines] == [
        (12.0, 0.7), (300.0, 0.8),
    ]  # fmt: skip
    assert axes.get_xscale() == "log"
    assert [(text.get_text(), text.xy) for text in axes.texts] == [
        ("b", (12.0, 0.7)), ("ours", (300.0, 0.8)),
    ]  # fmt: skip
    assert [text.get_weight() for text in axes.texts] == ["normal", "bold"]


@pytest.mark.parametrize(
    ("names", "cost", "accuracy"),
    [(["a", "gone"], [3.0, 4.0], [0.5, np.nan]), (["gone"], [3.0], [np.nan]), ([], [], [])],
)
def test_costs_of_failed_ones_and_of_none(names, cost, accuracy, caplog):
    figure = draw_costs(names, np.array(cost), np.array(accuracy), "a", "microseconds")
    assert as_png(figure)
    assert as_svg(figure)
    assert not caplog.records  # matplotlib only logs places that are not finite


def test_bars_are_the_values_from_the_top():
    names = ["without euler", "only area", "none"]
    values = np.array([-0.05, 0.02, 0.0])
    low, high = values - 0.01, values + np.array([0.02, 0.03, 0.0])
    [axes] = draw_bars(names, values, low, high, "change").axes
    assert [bar.get_width() for bar in axes.patches] == values.tolist()
    middles = [bar.get_y() + bar.get_height() / 2 for bar in axes.patches]
    assert middles == pytest.approx([2, 1, 0])
    ticks = dict(zip(axes.get_yticks(), (t.get_text() for t in axes.get_yticklabels()),
                     strict=True))  # fmt: skip
    assert ticks == {2: "without euler", 1: "only area", 0: "none"}
    [reach] = axes.collections
    ends = [tuple(segment[:, 0]) for segment in reach.get_segments()]
    np.testing.assert_allclose(ends, np.stack([low, high], axis=1), atol=1e-15)
    hatches = [bar.get_hatch() for bar in axes.patches]
    assert hatches == ["///", None, None]  # losses are told without colour, too


def test_bars_without_intervals():
    nan = np.array([np.nan])
    figure = draw_bars(["a"], np.array([0.1]), nan, nan, "change")
    assert as_png(figure)


@pytest.mark.parametrize("name", ["_hidden", "$x^$", "a$b", r"\$5 \alpha", "$", "<&|>", ""])
def test_every_name_is_shown_as_it_is(name):
    given = lines(name, "ours")
    figures = [
        draw_lines(given, PLACES, "x"),
        draw_costs([name], np.ones(1), np.ones(1), "ours", "x"),
        draw_bars([name], np.ones(1), np.ones(1), np.ones(1), f"minus that of {name}"),
    ]
    for figure in figures:
        assert as_png(figure).startswith(b"\x89PNG")
        words = list(ElementTree.fromstring(as_svg(figure)).itertext())
        assert not name or any(name in word for word in words)
    assert len(legend_of(figures[0])) == 2


def test_svg_and_png_are_the_same_each_time():
    def drawn():
        return draw_lines(lines("b", "ours"), PLACES, "condition")

    figure = drawn()
    assert as_svg(figure) == as_svg(figure) == as_svg(drawn())
    assert as_png(drawn()) == as_png(drawn())
    root = ElementTree.fromstring(as_svg(figure))
    assert root.tag.endswith("svg")
    assert b"dc:date" not in as_svg(figure)


def test_figures_are_unknown_to_pyplot():
    before = _pylab_helpers.Gcf.get_all_fig_managers()
    figure = draw_lines(lines("ours"), PLACES, "x")
    as_png(figure)
    assert isinstance(figure, Figure)
    assert _pylab_helpers.Gcf.get_all_fig_managers() == before


def test_colours_are_dark_enough_to_be_seen_on_white():
    """Relative luminance below .6: a contrast of more than 1.6 to white, lines have markers too."""
    for colour in (charts.OWN_COLOUR, *charts.OTHER_COLOURS):
        share = np.array(colors.to_rgb(colour))
        linear = np.where(share <= 0.04045, share / 12.92, ((share + 0.055) / 1.055) ** 2.4)
        assert linear @ [0.2126, 0.7152, 0.0722] < 0.6


def test_missing_matplotlib_says_what_to_install(monkeypatch):
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    for call in (charts.require_matplotlib, lambda: draw_lines([], [], "x")):
        with pytest.raises(ImportError, match=r"python -m pip install matplotlib .*\[charts\]"):
            call()
