"""Tell the surface conditions of powder-coated panels apart, on panels never seen in training.

Simulated height maps (micrometres, 10 um pitch) with form, tilt, sensor noise and lost pixels are
cut into patches; each patch becomes a vector of Minkowski curves; a linear classifier is
cross-validated so that no panel lies on both sides. Prints a report and a confusion table, saves a
figure. Run `python recipes/panel_defects.py --help` for the sizes.
"""

import argparse
import sys
import time
from pathlib import Path

import numpy as np
from joblib import Parallel, delayed
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.metrics import classification_report, confusion_matrix
from sklearn.model_selection import GroupKFold, cross_val_predict
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from tqdm import tqdm

from mfeat import MinkowskiCurves, PatchGrid
from mfeat.surfaces import PANEL_CONDITIONS, simulate_panel

PITCH = 0.01  # mm, so that contours come in 1/mm and Euler numbers in 1/mm^2

# Patches with less than this share of defective pixels hold a sliver of a defect, or none that
# anybody could see; they are set aside, not called sound.
SMALLEST_DEFECT = 0.01


def make_panels(number: int, side: int) -> list:
    """Simulate `number` square panels of each condition."""
    jobs = [
        delayed(simulate_panel)(condition, seed, (side, side), 1000 * PITCH)
        for condition in PANEL_CONDITIONS
        for seed in range(number)
    ]
    running = Parallel(n_jobs=-1, prefer="threads", return_as="generator")(jobs)
    return list(tqdm(running, "panels", len(jobs), disable=None))


def cut_patches(panels: list, size: int, stride: int):
    """Cut panels into patches; returns patches, labels, panel numbers, and how many were left."""
    grid = PatchGrid(size, stride, min_valid=0.5)
    images, labels, groups, unclear = [], [], [], 0
    for number, panel in enumerate(panels):
        patches = grid.cut(panel.height)
        truth = patches.label(panel.truth, rule="any")
        for patch, label, fraction in zip(patches, *truth, strict=True):
            if label and fraction < SMALLEST_DEFECT:
                unclear += 1
                continue
            images.append(patch)
            labels.append(PANEL_CONDITIONS[label])
            groups.append(number)
    return images, np.array(labels), np.array(groups), unclear


def make_pipeline_for_height_maps():
    """Curves of the fields that form and tilt do not reach, and a linear classifier."""
    curves = MinkowskiCurves(
        levels=12,
        raw=False,  # form and tilt live in the raw and the smoothed heights ...
        smooth=(),
        band=(1, 2, 4),  # ... but not in bands, nor in the curvature
        slope=(1, 2, 4),
        curvature=(1, 2, 4),
        pitch=PITCH,
        n_jobs=-1,
    )
    classifier = LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto")
    return curves, make_pipeline(StandardScaler(), classifier)


def draw(path: Path, images, labels, groups, vectors, names, table) -> None:
    """Save a figure: a patch of each condition, class curves, and the confusion table."""
    import matplotlib

    matplotlib.use("Agg")
    import matplotlib.pyplot as plt

    present = [c for c in PANEL_CONDITIONS if c in labels]
    figure, charts = plt.subplot_mosaic(
        [list(PANEL_CONDITIONS), ["left", "left", "middle", "middle", "right", "right"]],
        figsize=(13, 7.6),
        height_ratios=(1, 1.6),
        layout="constrained",
    )
    left, middle, right = charts["left"], charts["middle"], charts["right"]
    colours = plt.get_cmap("cividis")(np.linspace(0.0, 0.92, len(present)))
    strokes = ["-", "--", "-.", ":", (0, (5, 1, 1, 1, 1, 1)), (0, (1, 3))]
    for condition in present:
        axes = charts[condition]
        of_class = np.flatnonzero(labels == condition)
        patch = images[of_class[len(of_class) // 2]]
        y, x = np.indices(patch.shape)
        good = np.isfinite(patch)
        plane = np.stack([np.ones(patch.size), y.ravel(), x.ravel()], axis=1)
        fit = np.linalg.lstsq(plane[good.ravel()], patch[good].astype(float), rcond=None)[0]
        shown = axes.imshow(patch - (plane @ fit).reshape(patch.shape), cmap="bone")
        axes.set(title=condition.replace("_", " "), xticks=[], yticks=[], facecolor="crimson")
        figure.colorbar(
            shown, ax=axes, orientation="horizontal", label="height, um (red: lost)", shrink=0.8
        )
    for axes, functional, unit in ((left, "contour", "1/mm"), (middle, "euler", "1/mm$^2$")):
        columns = [k for k, name in enumerate(names) if name.startswith(f"band_4_{functional}_")]
        levels = np.linspace(-2.5, 2.5, len(columns))
        for condition, colour, stroke in zip(present, colours, strokes, strict=False):
            median = np.median(vectors[np.ix_(labels == condition, columns)], axis=0)
            axes.plot(
                levels,
                median,
                color=colour,
                linestyle=stroke,
                lw=2,
                label=condition.replace("_", " "),
            )
        axes.set(
            xlabel="level, standard deviations",
            ylabel=f"{functional} density, {unit}",
            title=f"band of 40 um, class medians: {functional}",
        )
    left.legend(frameon=False, fontsize=8)
    share = table / table.sum(axis=1, keepdims=True)
    right.imshow(share, cmap="bone_r", vmin=0, vmax=1)
    for (row, col), number in np.ndenumerate(table):
        right.text(
            col,
            row,
            number,
            ha="center",
            va="center",
            color="white" if share[row, col] > 0.5 else "black",
        )
    ticks = [c.replace("_", "\n") for c in present]
    right.set_xticks(range(len(present)), ticks, fontsize=8)
    right.set_yticks(range(len(present)), ticks, fontsize=8)
    right.set(
        xlabel="found",
        ylabel="true",
        title=f"{len(labels)} patches, {len(np.unique(groups))} panels, none on both sides",
    )
    figure.savefig(path, dpi=110)
    plt.close(figure)


def main(argv: list[str] | None = None) -> float:
    """Run the recipe; returns the balanced accuracy."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n", 1)[0])
    parser.add_argument("--panels", type=int, default=10, help="panels per condition (10)")
    parser.add_argument("--side", type=int, default=512, help="side of a panel in pixels (512)")
    parser.add_argument("--size", type=int, default=128, help="side of a patch in pixels (128)")
    parser.add_argument("--stride", type=int, default=64, help="step between patches (64)")
    parser.add_argument("--folds", type=int, default=5, help="folds of panels (5)")
    parser.add_argument("--out", type=Path, default=Path("out"), help="folder of the figure (out)")
    options = parser.parse_args(argv)

    start = time.perf_counter()
    panels = make_panels(options.panels, options.side)
    images, labels, groups, unclear = cut_patches(panels, options.size, options.stride)
    curves, classifier = make_pipeline_for_height_maps()
    print(
        f"{len(images)} patches of {options.size}x{options.size} pixels from {len(panels)} "
        f"panels; {unclear} with less than {SMALLEST_DEFECT:.0%} of defect set aside"
    )
    begun = time.perf_counter()
    vectors = curves.fit_transform(images)
    spent = time.perf_counter() - begun
    print(
        f"vectors of {vectors.shape[1]} numbers, {1000 * spent / len(images):.2f} ms a patch "
        f"(settings {curves.fingerprint()[:12]})"
    )
    found = cross_val_predict(
        classifier, vectors, labels, groups=groups, cv=GroupKFold(options.folds)
    )
    present = [c for c in PANEL_CONDITIONS if c in labels]
    print()
    print(classification_report(labels, found, labels=present, digits=3, zero_division=0))
    table = confusion_matrix(labels, found, labels=present)
    width = max(len(c) for c in present) + 2
    print("true \\ found".ljust(width) + "".join(c.rjust(width) for c in present))
    for condition, row in zip(present, table, strict=True):
        print(condition.ljust(width) + "".join(str(number).rjust(width) for number in row))
    options.out.mkdir(parents=True, exist_ok=True)
    path = options.out / "panel_defects.png"
    draw(path, images, labels, groups, vectors, curves.get_feature_names_out(), table)
    recall = (table.diagonal() / table.sum(axis=1)).mean()
    print(
        f"\nbalanced accuracy {recall:.3f} (chance {1 / len(present):.3f}); figure: {path}; "
        f"{time.perf_counter() - start:.0f} s"
    )
    print(
        "A verdict of a classifier is an aid. Validate on your own parts and measuring system; "
        "safety-related\nacceptance follows the applicable standards and qualified people."
    )
    return float(recall)


if __name__ == "__main__":
    main(sys.argv[1:])
