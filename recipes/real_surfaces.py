"""Tell three real surfaces apart when light, orientation, noise, focus and scale have changed.

scikit-image's bundled photographs of brick, grass and gravel: train on patches of the left half,
test on patches of the right half, as they are and changed after training. Prints the accuracy of
four settings under each condition. Run `python recipes/real_surfaces.py --help` for the sizes.
"""

import argparse
import sys

import numpy as np
from skimage import data
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from mfeat import MinkowskiCurves, PatchGrid
from mfeat.conditions import Scene, conditions_for, margin_for
from mfeat.transformer import full_curves

SURFACES = ("brick", "grass", "gravel")
SIZE = 64
CONDITIONS = conditions_for("grey")


def training_patches(stride: int):
    """Return patches of the left halves and their labels."""
    images, labels = [], []
    for name in SURFACES:
        image = getattr(data, name)()
        patches = PatchGrid(SIZE, stride).cut(image[:, : image.shape[1] // 2])
        images += list(patches)
        labels += [name] * len(patches)
    return np.stack(images), np.array(labels)


def test_patches(number: int, condition, seed: int):
    """Return `number` changed patches of each right half, at random places, and their labels."""
    rng = np.random.default_rng(seed)
    images, labels = [], []
    margin = margin_for((SIZE, SIZE))  # so that turned and zoomed ones have real pixels everywhere
    wide = SIZE + 2 * margin
    for name in SURFACES:
        image = getattr(data, name)()
        half = image[:, image.shape[1] // 2 :]
        for _ in range(number):
            row, col = (rng.integers(0, length - wide + 1) for length in half.shape)
            scene = Scene(half[row : row + wide, col : col + wide], margin, full_scale=255.0)
            images.append(condition.change(scene, rng))
            labels.append(name)
    return np.stack(images), np.array(labels)


def main(argv: list[str] | None = None) -> dict[str, dict[str, float]]:
    """Run the recipe; returns the accuracies by settings and condition."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n", 1)[0])
    parser.add_argument("--patches", type=int, default=60, help="test patches per surface (60)")
    parser.add_argument("--stride", type=int, default=32, help="step of training patches (32)")
    options = parser.parse_args(argv)

    settings = {
        "default vector": MinkowskiCurves(n_jobs=-1),
        'location_scale="ratio"': MinkowskiCurves(location_scale="ratio", n_jobs=-1),
        # noise roughens what is smooth, so matched scales smooth it more; fixed ones do not
        'scale_rule="fixed"': MinkowskiCurves(scale_rule="fixed", n_jobs=-1),
        "whole curves, fixed fields": MinkowskiCurves(**full_curves(), n_jobs=-1),
    }
    X, y = training_patches(options.stride)
    print(
        f"train: {len(X)} patches of the left halves; test: {options.patches} patches of each "
        f"right half; {SIZE}x{SIZE} pixels\n"
    )
    print(
        "accuracy".ljust(31)
        + "".join(condition.name.rjust(10) for condition in CONDITIONS)
        + "numbers".rjust(10)
    )
    accuracies = {}
    for name, curves in settings.items():
        classifier = LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto")
        model = make_pipeline(curves, StandardScaler(), classifier).fit(X, y)
        accuracies[name] = {
            condition.name: float(model.score(*test_patches(options.patches, condition, seed)))
            for seed, condition in enumerate(CONDITIONS)
        }
        numbers = len(curves.get_feature_names_out())
        print(
            name.ljust(31)
            + "".join(f"{a:10.3f}" for a in accuracies[name].values())
            + f"{numbers:10d}"
        )
    return accuracies


if __name__ == "__main__":
    main(sys.argv[1:])
