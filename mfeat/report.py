"""The report of a comparison: what it says as Markdown, and as one HTML page with its charts."""

import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mfeat import __version__, charts
from mfeat.comparison import ALL, VARIANT, Comparison
from mfeat.conditions import CONDITIONS
from mfeat.pages import html_page, markdown
from mfeat.significance import Mean

REPORT_MARKDOWN = "report.md"
REPORT_HTML = "report.html"

CAUTION = (
    "A classifier's verdict is an aid. Accuracies hold for these images and these changes; "
    "validate on your own parts and your own measuring system. Safety-related acceptance follows "
    "the applicable standards and qualified people."
)

# Differences with a larger p are called no difference.
_LEVEL = 0.05

# Failures and left out images that are listed.
_LISTED = 20


@dataclass
class Table:
    """A table of a report: its head, rows of text, and the columns that hold numbers."""

    head: list[str]
    rows: list[list[str]]
    own: str = ""  # the first cell of the row to stress


@dataclass
class Section:
    """A section of a report, in the order in which its parts are shown."""

    title: str
    text: list[str] = field(default_factory=list)
    chart: tuple[str, str, Any] | None = None  # name, what it shows, figure
    tables: list[Table] = field(default_factory=list)


def require_charts() -> None:
    """Refuse to start what cannot draw its report in the end; says what to install."""
    charts.require_matplotlib()


def write_report(found: Comparison) -> dict[str, bytes]:
    """Return the files of a report by name: Markdown, HTML, and charts as PNG and SVG."""
    sections = [make(found) for make in _SECTIONS]
    sections = [section for section in sections if section is not None]
    files: dict[str, bytes] = {}
    for section in sections:
        if section.chart is not None:
            name, _, figure = section.chart
            files[f"charts/{name}.png"] = charts.as_png(figure)
            files[f"charts/{name}.svg"] = charts.as_svg(figure)
    title = "Comparison of texture descriptors"
    files[REPORT_MARKDOWN] = markdown(title, CAUTION, sections).encode()
    files[REPORT_HTML] = html_page(title, CAUTION, sections, files).encode()
    return files


def short(value: float, digits: int = 3) -> str:
    """Return a share as text, ".954"; a dash for what does not exist."""
    if value is None or math.isnan(value):
        return "–"
    text = f"{value:.{digits}f}"
    return text.replace("0.", ".", 1) if text.startswith(("0.", "-0.")) else text


def _interval(mean: Mean) -> str:
    if math.isnan(mean.mean):
        return "failed"
    return f"{short(mean.mean)} [{short(max(mean.low, 0.0))}, {short(min(mean.high, 1.0))}]"


def _by_mean(found: Comparison, names: list[str]) -> list[str]:
    """Return names with the best first; failed ones last."""
    return sorted(names, key=lambda name: -np.nan_to_num(found.accuracy(name).mean, nan=-1.0))


def _verdict(found: Comparison) -> Section:
    return Section("What was found", [_what_was_done(found), verdict(found)])


def verdict(found: Comparison) -> str:
    """Return in words how the reference does against the best of the others."""
    own = found.reference
    others = [name for name in _by_mean(found, found.rivals) if name != own]
    ours = found.accuracy(own).mean
    if math.isnan(ours):
        return f"{own} failed under some condition; see below."
    if not others:
        return f"{own}: {short(ours)} over all conditions."
    best = others[0]
    theirs = found.accuracy(best).mean
    if math.isnan(theirs):
        return f"{own}: {short(ours)} over all conditions; all others failed under some condition."
    mean = next(
        test for test in found.against_reference(others)
        if (test.descriptor, test.condition) == (best, ALL)
    )  # fmt: skip
    ahead = sum(
        found.accuracy(own, condition).mean
        > max(np.nan_to_num(found.accuracy(other, condition).mean) for other in others)
        for condition in found.conditions
    )
    sure = "more than luck" if mean.adjusted_p < _LEVEL else "which may be luck"
    return (
        f"{own}: {short(ours)} over all conditions; the best other, {best}: {short(theirs)}. The "
        f"difference is {short(mean.difference.mean)} [{short(mean.difference.low)}, "
        f"{short(mean.difference.high)}], {sure} (p = {mean.adjusted_p:.2g}). Error "
        f"{short(1 - ours)} against {short(1 - theirs)}; {own} is ahead of all others in {ahead} "
        f"of {len(found.conditions)} conditions."
    )


def _what_was_done(found: Comparison) -> str:
    record, size = found.about["record"], found.about["sizes"][0]
    how = (
        "every image is a class; patches of one half train, those of the other half are tested"
        if record["protocol"] == "halves"
        else "labelled patches; no group is on both sides of a split"
    )
    return (
        f"{size['classes']} classes, {size['patches']} patches of {size['size'][0]}x"
        f"{size['size'][1]} pixels, {size['splits']} splits, {size['train_sizes'][-1]} training "
        f"patches a class ({how}). Training patches are clean; only test patches change. Accuracy "
        f"is the mean recall of the classes, averaged over {' and '.join(found.classifiers)}; "
        "intervals are of 95 %, with the variance corrected for overlapping splits (Nadeau and "
        "Bengio 2003)."
    )


def _conditions(found: Comparison) -> Section:
    names = _by_mean(found, found.rivals)
    places = [*found.conditions, ALL]
    lines = []
    for name in names:
        means = [found.accuracy(name, place) for place in places]
        values, low, high = (np.array([getattr(m, k) for m in means]) for k in Mean._fields)
        lines.append(charts.Line(name, values, low, high, name == found.reference))
    figure = charts.draw_lines(lines, places, "condition of the test patches")
    head = ["descriptor", *places, "numbers"]
    rows = [
        [name, *(short(found.accuracy(name, place).mean) for place in places),
         str(found.cost(name)["n_features"] or "–")]
        for name in names
    ]  # fmt: skip
    tables = [Table(head, rows, found.reference)]
    about = [f"{name}: {CONDITIONS[name].about}." for name in found.conditions]
    return Section(
        "Accuracy by condition",
        ["The shaded band is the interval of the reference."],
        ("accuracy-by-condition", "balanced accuracy of each descriptor under each condition",
         figure),
        [*tables, Table(["condition", "what changes"], [list(a.split(": ", 1)) for a in about])],
    )  # fmt: skip


def _classifiers(found: Comparison) -> Section:
    tables = []
    for classifier in found.classifiers:
        names = sorted(
            found.rivals,
            key=lambda n: -np.nan_to_num(found.accuracy(n, classifier=classifier).mean, nan=-1.0),
        )
        rows = [
            [name, *(_interval(found.accuracy(name, c, classifier=classifier))
                     for c in (*found.conditions, ALL))]
            for name in names
        ]  # fmt: skip
        tables.append(Table([classifier, *found.conditions, ALL], rows, found.reference))
    return Section("Each classifier, with intervals", [], None, tables)


def _tests(found: Comparison) -> Section | None:
    own = found.reference
    others = [name for name in _by_mean(found, found.rivals) if name != own]
    if not others:
        return None
    tests = {(t.descriptor, t.condition): t for t in found.against_reference(others)}

    def cell(test: Any) -> str:
        if math.isnan(test.difference.mean):
            return "failed"
        mark = "" if test.adjusted_p < _LEVEL else " (may be luck)"
        return f"{test.difference.mean:+.3f}{mark}"

    rows = [[other, *(cell(tests[other, c]) for c in (*found.conditions, ALL))] for other in others]
    return Section(
        "Differences",
        [
            f"Accuracy of {own} minus that of each other, over the same splits. By the corrected "
            "resampled t-test (Nadeau and Bengio 2003), adjusted for the number of comparisons "
            f"(Holm 1979); what has p of {_LEVEL} or more may be luck."
        ],
        None,
        [Table([f"{own} minus", *found.conditions, ALL], rows)],
    )


def _costs(found: Comparison) -> Section:
    names = [name for name in _by_mean(found, found.rivals) if found.cost(name)["microseconds"]]
    cost = {name: found.cost(name) for name in names}
    accuracy = np.array([found.accuracy(name).mean for name in names])
    micro = np.array([cost[name]["microseconds"] for name in names])
    figure = charts.draw_costs(
        names, micro, accuracy, found.reference, "microseconds a patch, one thread"
    )
    rows = [
        [
            name, str(cost[name]["n_features"]), f"{cost[name]['microseconds']:.0f}",
            "–" if cost[name]["ratio"] is None else
            f"{cost[name]['ratio']:.2g} [{cost[name]['ratio_low']:.2g}, "
            f"{cost[name]['ratio_high']:.2g}]",
            f"{cost[name]['peak_bytes'] / 1e6:.1f}", short(mean),
        ]
        for name, mean in zip(names, accuracy, strict=True)
    ]  # fmt: skip
    head = ["descriptor", "numbers", "µs a patch", "time over the first's", "peak MB", "accuracy"]
    return Section(
        "What it costs",
        [
            "Times of one thread, 64 patches in a batch, medians with quartiles of ratios taken in "
            "the same round. Peak memory of one call beyond the patches."
        ],
        ("accuracy-against-cost", "mean accuracy against microseconds a patch", figure),
        [Table(head, rows, found.reference)],
    )


def _learning(found: Comparison) -> Section | None:
    sizes = found.train_sizes()
    if len(sizes) < 2:
        return None
    names = _by_mean(found, found.rivals)
    lines = []
    for name in names:
        means = [found.accuracy(name, train_size=size) for size in sizes]
        values, low, high = (np.array([getattr(m, k) for m in means]) for k in Mean._fields)
        lines.append(charts.Line(name, values, low, high, name == found.reference))
    figure = charts.draw_lines(
        lines, [str(size) for size in sizes], "training patches a class",
        "balanced accuracy, mean over conditions",
    )  # fmt: skip
    rows = [[line.name, *(short(value) for value in line.values)] for line in lines]
    return Section(
        "Learning curves", [],
        ("learning-curves", "mean accuracy against training patches a class", figure),
        [Table(["descriptor", *(f"{size} a class" for size in sizes)], rows, found.reference)],
    )  # fmt: skip


def _ablation(found: Comparison) -> Section | None:
    if not found.variants:
        return None
    own = found.reference
    tests = {(t.descriptor, t.condition): t for t in found.against_reference(found.variants)}
    names = [n for n in found.variants if not math.isnan(tests[n, ALL].difference.mean)]
    labels = [name.removeprefix(VARIANT) for name in names]
    change = [tests[name, ALL].difference for name in names]
    figure = charts.draw_bars(
        labels, *(np.array(side) for side in zip(
            *((-d.mean, -d.high, -d.low) for d in change), strict=True)),
        f"accuracy minus that of {own}, mean over conditions",
    ) if names else None  # fmt: skip
    rows = [
        [
            name.removeprefix(VARIANT),
            *(short(found.accuracy(name, c).mean) for c in (*found.conditions, ALL)),
            "–" if (name, ALL) not in tests or math.isnan(tests[name, ALL].difference.mean)
            else f"{-tests[name, ALL].difference.mean:+.3f}"
            + ("" if tests[name, ALL].adjusted_p < _LEVEL else " (may be luck)"),
            str(found.cost(name)["n_features"] or "–"),
        ]
        for name in found.variants
    ]  # fmt: skip
    rows.insert(
        0, [own, *(short(found.accuracy(own, c).mean) for c in (*found.conditions, ALL)), "",
            str(found.cost(own)["n_features"] or "–")]
    )  # fmt: skip
    chart = None
    if figure is not None:
        chart = ("ablation", "change of accuracy when a part of the vector is changed", figure)
    head = ["variant", *found.conditions, ALL, "change", "numbers"]
    return Section("Which part earns its place", [], chart, [Table(head, rows, own)])


def _patch_sizes(found: Comparison) -> Section | None:
    if len(found.sizes) < 2:
        return None
    names = _by_mean(found, found.rivals)
    lines = [
        charts.Line(
            name, np.array([found.accuracy(name, size=size).mean for size in found.sizes]),
            None, None, name == found.reference,
        )
        for name in names
    ]  # fmt: skip
    places = [f"{rows}x{cols}" for rows, cols in found.sizes]
    figure = charts.draw_lines(
        lines, places, "patch, pixels", "balanced accuracy, mean over conditions"
    )
    trained = "; ".join(
        f"{place}: {found.train_sizes(size)[-1]} training patches a class"
        for place, size in zip(places, found.sizes, strict=True)
    )
    rows = [[line.name, *(short(value) for value in line.values)] for line in lines]
    return Section(
        "Patch size", [f"At the largest training size of each ({trained})."],
        ("patch-size", "mean accuracy against the size of patches", figure),
        [Table(["descriptor", *places], rows, found.reference)],
    )  # fmt: skip


def _remarks(found: Comparison) -> Section:
    text, tables = [], []
    for about in found.about["sizes"]:
        size = f"{about['size'][0]}x{about['size'][1]}"
        if about["mirrored"]:
            text.append(
                f"{size}: the surroundings of {about['mirrored']} of {about['patches']} patches "
                "reach beyond the image (or its half) and were mirrored there."
            )
        if about["overlapping"]:
            text.append(f"{size}: patches overlap, because the images are small.")
    left_out = list(dict.fromkeys(
        tuple(one) for about in found.about["sizes"] for one in about["left_out"]
    ))  # fmt: skip
    if left_out:
        text.append(f"{len(left_out)} left out" + _first_of(left_out))
        tables.append(Table(["left out", "why"], [list(one) for one in left_out[:_LISTED]]))
    failures = _failures(found)
    if failures:
        text.append(f"{len(failures)} failures:")
        tables.append(Table(["descriptor", "condition", "failure", "results"], failures))
    if not text:
        text.append("Nothing was left out, and nothing failed.")
    return Section("Left out, failed, worth knowing", text, None, tables)


def _failures(found: Comparison) -> list[list[str]]:
    """Return a row for each descriptor and condition that failed: the most frequent reason."""
    reasons: dict[tuple[str, str], dict[str, int]] = {}
    for name, condition, reason, count in found.failures():
        reasons.setdefault((name, condition), {})[reason] = count
    for row in found.costs.to_pylist():
        if row["failure"] is not None:
            reasons.setdefault((row["descriptor"], "costs"), {})[row["failure"]] = 1
    rows = []
    for own, counts in reasons.items():
        main = max(counts, key=counts.get)
        others = f" (and {len(counts) - 1} other reasons)" if len(counts) > 1 else ""
        rows.append([*own, main + others, str(sum(counts.values()))])
    return rows


def _first_of(listed: list) -> str:
    return f"; the first {_LISTED}:" if len(listed) > _LISTED else ":"


def _settings(found: Comparison) -> Section:
    record = found.about["record"]
    plain = {key: record[key] for key in record if key not in ("descriptors", "inputs")}
    rows = [[key, str(value)] for key, value in plain.items()]
    names = [[name, text] for name, text in record["descriptors"].items()]
    return Section(
        "Settings", [f"mfeat {__version__}; every single result is in results.parquet."], None,
        [Table(["setting", "value"], rows), Table(["descriptor", "with all parameters"], names)],
    )  # fmt: skip


_SECTIONS: tuple[Callable[[Comparison], Section | None], ...] = (
    _verdict, _conditions, _tests, _costs, _learning, _ablation, _patch_sizes, _classifiers,
    _remarks, _settings,
)  # fmt: skip
