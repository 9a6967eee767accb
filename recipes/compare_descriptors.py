"""Compare descriptors on labelled height maps, with one of your own among them.

Simulated coated panels, labelled by their truth, are cut into patches; no panel is on both sides of
a split; test patches are also turned, noisy, blurred, tilted, or have dropouts. The descriptor of
your own is `HeightParameters` below: any scikit-learn transformer will do. It takes part first from
Python, then by its import path from the command line:

    python recipes/compare_descriptors.py --out out/compare_descriptors
"""

import argparse
import os
import sys
from pathlib import Path

import numpy as np
from sklearn.base import BaseEstimator, TransformerMixin

from mfeat import MinkowskiCurves, compare
from mfeat.cli import main as command_line
from mfeat.demo import write_demo
from mfeat.descriptors import FilterBank
from mfeat.transformer import full_curves


class HeightParameters(TransformerMixin, BaseEstimator):
    """Sq, Ssk, Sku, Sp and Sv of each patch (ISO 25178-2), over its valid pixels."""

    def fit(self, X, y=None):
        """Do nothing: there is nothing to learn."""
        return self

    def transform(self, X):
        """Return five numbers a patch."""
        return np.array([self._of(np.ma.filled(np.ma.asarray(x, float), np.nan)) for x in X])

    @staticmethod
    def _of(patch):
        height = patch[np.isfinite(patch)]
        height = height - height.mean()
        sq = height.std()
        moments = [np.mean((height / sq) ** power) for power in (3, 4)]
        return [sq, *moments, height.max(), -height.min()]

    def __sklearn_tags__(self):
        tags = super().__sklearn_tags__()
        tags.requires_fit = False  # so that its numbers are computed once, not for every split
        return tags


def main(argv: list[str] | None = None) -> dict[str, float]:
    """Compare; returns the mean accuracy of each descriptor."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--out", type=Path, default=Path("out/compare_descriptors"))
    parser.add_argument("--panels", type=int, default=6, help="panels a condition")
    parser.add_argument("--side", type=int, default=512, help="side of a panel in pixels")
    parser.add_argument("--size", type=int, default=128, help="side of a patch in pixels")
    parser.add_argument("--repeats", type=int, default=3)
    parser.add_argument("--jobs", type=int, default=-1)
    options = parser.parse_args(argv)

    manifest = options.out / "panels" / "manifest.csv"
    if not manifest.exists():
        write_demo(manifest.parent, options.panels, side=options.side)

    # Small defects show in the tails of curves, which Hermite functions damp: whole curves, of
    # levelled patches, of fields that coarse form hardly reaches.
    own = MinkowskiCurves(
        **full_curves()
        | {"raw": False, "smooth": (), "scale_rule": "matched", "remove_tilt": True}
        | dict.fromkeys(("band", "slope", "curvature"), (2, 4, 8))
    )
    found = compare(
        manifest,
        options.out / "from_python",
        {
            "minkowski": own,
            "height parameters": HeightParameters(),
            "filter bank": FilterBank(missing="nearest"),
        },
        size=options.size,
        label_from="truth",
        truth_rule="any",
        repeats=options.repeats,
        jobs=options.jobs,
    )
    accuracy = {name: found.accuracy(name).mean for name in found.descriptors}
    for name, mean in sorted(accuracy.items(), key=lambda item: -item[1]):
        each = ", ".join(f"{c} {found.accuracy(name, c).mean:.2f}" for c in found.conditions)
        print(f"{name}: {mean:.3f} ({each})")
    print(f"report: {found.out}/report.html")

    # The same from the command line: mfeat compare ... --descriptor compare_descriptors:...
    folder = str(Path(__file__).parent)
    sys.path.insert(0, folder)
    os.environ["PYTHONPATH"] = os.pathsep.join([folder, os.environ.get("PYTHONPATH", "")])
    command = [
        *["compare", str(manifest), "--out", str(options.out / "from_command")],
        *["--descriptor", "compare_descriptors:HeightParameters"],
        *["--descriptor", "grey-histogram", "--condition", "clean", "--condition", "tilt"],
        *["--label-from", "truth", "--truth-rule", "any", "--size", str(options.size)],
        *["--repeats", "2", "--jobs", str(options.jobs)],
    ]
    print("mfeat", *command)
    if command_line(command):
        raise SystemExit("the command failed")
    print(
        "A classifier's verdict is an aid: validate it on your own parts and measuring system; "
        "safety-related acceptance follows the applicable standards and qualified people."
    )
    return accuracy


if __name__ == "__main__":
    main()
