"""Tell the surface conditions of powder-coated panels apart, on panels never seen in training.

Simulated height maps (micrometres, 10 um pitch) with form, tilt, sensor noise and lost pixels are
cut into patches; each patch becomes a vector of Minkowski curves; a linear classifier is
cross-validated so that no panel is in both training and test. Prints a report, a confusion table
and what plain roughness parameters reach; saves a figure. `python recipes/panel_defects.py --help`
tells the sizes.
"""

import argparse
import sys
import time
from pathlib import Path

import numpy as np
from joblib import Parallel, delayed
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.metrics import balanced_accuracy_score, classification_report, confusion_matrix
from sklearn.model_selection import GroupKFold, cross_val_predict
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler
from tqdm import tqdm

from mfeat import MinkowskiCurves, PatchGrid
from mfeat.surfaces import PANEL_CONDITIONS, simulate_panel
from mfeat.transformer import full_curves

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
    """Cut panels into patches.

    Returns patches, their labels, panel numbers and defective shares, and how many were set aside.
    """
    grid = PatchGrid(size, stride, min_valid=0.5)
    images, labels, groups, shares, unclear = [], [], [], [], 0
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
            shares.append(fraction if label else 0.0)
    return images, np.array(labels), np.array(groups), np.array(shares), unclear


def make_curves() -> MinkowskiCurves:
    """Return the transformer: whole curves of levelled patches.

    Small defects show in the tails of curves, which the default's Hermite functions damp. Coarse
    form hardly reaches these fields.
    """
    fields = {
        "raw": False,
        "smooth": (),
        **dict.fromkeys(("band", "slope", "curvature"), (2, 4, 8)),
    }
    return MinkowskiCurves(
        **full_curves() | fields | {"scale_rule": "matched"},
        levels=12,
        remove_tilt=True,
        pitch=PITCH,
        n_jobs=-1,
    )


def make_classifier():
    """Return a linear classifier that copes with more numbers than patches."""
    classifier = LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto")
    return make_pipeline(StandardScaler(), classifier)


def levelled(patch: np.ndarray) -> np.ndarray:
    """Return a patch minus its least-squares plane."""
    y, x = np.indices(patch.shape)
    good = np.isfinite(patch)
    plane = np.stack([np.ones(patch.size), y.ravel(), x.ravel()], axis=1)
    fit = np.linalg.lstsq(plane[good.ravel()], patch[good].astype(float), rcond=None)[0]
    return patch - (plane @ fit).reshape(patch.shape)


def roughness(patch: np.ndarray) -> list[float]:
    """Return Sq, Ssk, Sku, Sp, Sv and Sdq of a levelled patch (ISO 25178-2), for comparison."""
    height = levelled(patch)
    known = height[np.isfinite(height)]
    sq = known.std()
    down, across = np.gradient(height, 1000 * PITCH)  # um per um
    sdq = np.sqrt(np.nanmean(down**2 + across**2))
    moments = [np.mean((known / sq) ** power) for power in (3, 4)]
    return [sq, *moments, known.max(), -known.min(), sdq]


def draw(path: Path, images, labels, groups, shares, vectors, names, table) -> None:
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
    colours = plt.get_cmap("cividis")(np.linspace(0.0, 0.8, len(present)))
    strokes = ["-", "--", "-.", ":", (0, (5, 1, 1, 1, 1, 1)), (0, (1, 3))]
    for condition in present:
        axes = charts[condition]
        worst = np.argmax(np.where(labels == condition, shares, -1.0))
        shown = axes.imshow(levelled(images[worst]), cmap="bone")
        axes.set(title=condition.replace("_", " "), xticks=[], yticks=[], facecolor="crimson")
        figure.colorbar(
            shown, ax=axes, orientation="horizontal", label="height, µm (red: lost)", shrink=0.8
        )
    for axes, functional, unit in ((left, "contour", "1/mm"), (middle, "euler", "1/mm$^2$")):
        columns = [k for k, name in enumerate(names) if name.startswith(f"band_8_{functional}_")]
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
            title=f"band of 40 µm, class medians: {functional}",
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
        title=f"{len(labels)} patches of {len(np.unique(groups))} panels,\n"
        "no panel in both training and test",
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
    print(f"simulating {options.panels * len(PANEL_CONDITIONS)} panels ...", flush=True)
    panels = make_panels(options.panels, options.side)
    images, labels, groups, shares, unclear = cut_patches(panels, options.size, options.stride)
    print(
        f"{len(images)} patches of {options.size}x{options.size} pixels; {unclear} with less than "
        f"{SMALLEST_DEFECT:.0%} of defect set aside"
    )
    curves = make_curves()
    curves.transform(images[:1])  # compiles or loads the kernels
    begun = time.perf_counter()
    vectors = curves.fit_transform(images)
    spent = time.perf_counter() - begun
    print(
        f"vectors of {vectors.shape[1]} numbers, {1000 * spent / len(images):.2f} ms a patch "
        f"(settings {curves.fingerprint()[:12]})"
    )
    folds = GroupKFold(options.folds)
    found = cross_val_predict(make_classifier(), vectors, labels, groups=groups, cv=folds)
    plain = np.array([roughness(patch) for patch in images])
    compared = cross_val_predict(make_classifier(), plain, labels, groups=groups, cv=folds)
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
    names = curves.get_feature_names_out()
    draw(path, images, labels, groups, shares, vectors, names, table)
    accuracy = balanced_accuracy_score(labels, found)
    print(
        f"\nbalanced accuracy {accuracy:.3f}; Sq, Ssk, Sku, Sp, Sv and Sdq of ISO 25178-2 with the "
        f"same classifier {balanced_accuracy_score(labels, compared):.3f}; "
        f"chance {1 / len(present):.3f}"
    )
    print(f"figure: {path}; {time.perf_counter() - start:.0f} s")
    print(
        "A verdict of a classifier is an aid. Validate on your own parts and measuring system; "
        "safety-related\nacceptance follows the applicable standards and qualified people."
    )
    return float(accuracy)


if __name__ == "__main__":
    main(sys.argv[1:])
