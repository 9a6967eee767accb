"""From a folder of images to a cross-validated classifier, through a Parquet feature table.

Without arguments, simulated coated panels are written and used; give a folder with one subfolder a
class, or a manifest with labels, to use images of your own:

    python recipes/folder_to_classifier.py path/to/images --label-from folder --out out/mine
"""

import argparse
from pathlib import Path

from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.metrics import balanced_accuracy_score, classification_report
from sklearn.model_selection import StratifiedGroupKFold, cross_val_predict
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from mfeat import MinkowskiCurves, dump, read_table
from mfeat.demo import write_demo
from mfeat.surfaces import PANEL_CONDITIONS
from mfeat.transformer import full_curves

#: Whole curves, in whose tails small defects show, of fields that coarse form hardly reaches.
CURVES = full_curves() | {
    **{"raw": False, "smooth": (), "scale_rule": "matched"},
    **dict.fromkeys(("band", "slope", "curvature"), (2, 4, 8)),
}


def main(argv: list[str] | None = None) -> float:
    """Dump, read back, cross-validate; returns the balanced accuracy."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("source", nargs="?", help="folder, pattern or manifest; default: a demo")
    parser.add_argument("--label-from", choices=("manifest", "folder", "truth"))
    parser.add_argument("--out", type=Path, default=Path("out/folder_to_classifier"))
    parser.add_argument("--panels", type=int, default=6, help="panels a condition of the demo")
    parser.add_argument("--side", type=int, default=512, help="side of a demo panel in pixels")
    parser.add_argument("--size", type=int, default=128, help="side of a patch in pixels")
    parser.add_argument("--stride", type=int, default=64, help="step from patch to patch")
    parser.add_argument("--folds", type=int, default=5)
    parser.add_argument("--fresh", action="store_true", help="in place of a table that is there")
    options = parser.parse_args(argv)
    if options.source and not options.label_from and Path(options.source).is_dir():
        parser.error("images of a folder need --label-from folder")

    source, label_from = options.source, options.label_from
    if source is None:
        demo = options.out / "panels"
        source = demo / "manifest.csv"
        if not source.exists():
            write_demo(demo, options.panels, side=options.side)
        label_from = "truth"  # images of labels, one a panel; one defect pixel makes a defect

    # The table. Run again after an interruption, this goes on where it stopped.
    summary = dump(
        source,
        options.out / "table",
        MinkowskiCurves(**CURVES, levels=12, remove_tilt=True),
        size=options.size,
        stride=options.stride,
        label_from=label_from,
        truth_rule="any",
        fresh=options.fresh,
    )
    print(summary)

    # scikit-learn. Patches of one image share a group, so none is on both sides of a split.
    table = read_table(options.out / "table").labelled()
    if label_from == "truth":  # a sliver of a defect is neither a defect nor sound
        share = table.columns["label_fraction"].to_numpy()
        table = table[(table.y == 0) | (share >= 0.01)]
    model = make_pipeline(
        StandardScaler(), LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto")
    )
    splits = StratifiedGroupKFold(options.folds, shuffle=True, random_state=0)
    found = cross_val_predict(model, table.X, table.y, groups=table.groups, cv=splits)

    names = None
    if label_from == "truth" and options.source is None:
        names = [PANEL_CONDITIONS[label].replace("_", " ") for label in sorted(set(table.y))]
    print(classification_report(table.y, found, target_names=names, zero_division=0.0))
    accuracy = float(balanced_accuracy_score(table.y, found))
    print(f"balanced accuracy {accuracy:.3f} over {options.folds} folds, no image on both sides")
    print(
        "The verdict of a classifier is an aid: validate it on your own parts and measuring system."
    )
    return accuracy


if __name__ == "__main__":
    main()
