"""Tell three real surfaces apart when light, orientation, noise, focus and scale have changed.

scikit-image's bundled photographs of brick, grass and gravel: train on patches of the left half,
test on patches of the right half, as they are and changed after training. Prints the accuracy of
four settings under each condition. Run `python recipes/real_surfaces.py --help` for the sizes.
"""

import argparse
import sys

import numpy as np
from scipy import ndimage
from skimage import data, transform
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from mfeat import MinkowskiCurves, PatchGrid
from mfeat.transformer import full_curves

SURFACES = ("brick", "grass", "gravel")
SIZE = 64
MARGIN = 24  # around a test patch, so that turned and zoomed ones have real pixels everywhere


def light(patch, rng):
    """Gamma .7 to 1.4, gain .6 to 1, offset up to 10 grey values, rounded to 8 bit."""
    gamma, gain = rng.uniform(0.7, 1.4), rng.uniform(0.6, 1.0)
    return np.clip(np.rint(255 * gain * (patch / 255) ** gamma + rng.uniform(-10, 10)), 0, 255)


def rotation(patch, rng):
    """Turn by any angle."""
    return transform.rotate(patch, rng.uniform(0, 360), preserve_range=True)


def noise(patch, rng):
    """Gaussian noise of a quarter of the patch's standard deviation."""
    return patch + rng.normal(scale=patch.std() / 4, size=patch.shape)


def blur(patch, rng):
    """Gaussian blur of .8 pixels."""
    return ndimage.gaussian_filter(patch, 0.8)


def zoom(patch, rng):
    """Zoom by .85 to 1.15."""
    return transform.rescale(patch, rng.uniform(0.85, 1.15), preserve_range=True)


CONDITIONS = {
    "clean": lambda patch, rng: patch,
    "light": light,
    "rotation": rotation,
    "noise": noise,
    "blur": blur,
    "zoom": zoom,
}


def training_patches(stride: int):
    """Return patches of the left halves and their labels."""
    images, labels = [], []
    for name in SURFACES:
        image = getattr(data, name)()
        patches = PatchGrid(SIZE, stride).cut(image[:, : image.shape[1] // 2])
        images += list(patches)
        labels += [name] * len(patches)
    return np.stack(images), np.array(labels)


def test_patches(number: int, change, seed: int):
    """Return `number` changed patches of each right half, at random places, and their labels."""
    rng = np.random.default_rng(seed)
    images, labels = [], []
    wide = SIZE + 2 * MARGIN
    for name in SURFACES:
        image = getattr(data, name)().astype(float)
        half = image[:, image.shape[1] // 2 :]
        for _ in range(number):
            row, col = (rng.integers(0, length - wide + 1) for length in half.shape)
            changed = change(half[row : row + wide, col : col + wide], rng)
            top, left = ((length - SIZE) // 2 for length in changed.shape)
            images.append(changed[top : top + SIZE, left : left + SIZE])
            labels.append(name)
    return np.stack(images), np.array(labels)


def main(argv: list[str] | None = None) -> dict[str, dict[str, float]]:
    """Run the recipe; returns the accuracies by settings and condition."""
    parser = argparse.ArgumentParser(description=__doc__.split("\n", 1)[0])
    parser.add_argument("--patches", type=int, default=60, help="test patches per surface (60)")
    parser.add_argument("--stride", type=int, default=32, help="step of training patches (32)")
    options = parser.parse_args(argv)

    whole = full_curves()
    settings = {
        "default vector": MinkowskiCurves(n_jobs=-1),
        "whole curves": MinkowskiCurves(**whole, n_jobs=-1),
        # light changes what the mean tells, blur and noise what the finest fields tell
        "without mean and deviation": MinkowskiCurves(**whole, location_scale=False, n_jobs=-1),
        "without fields at pixel scale": MinkowskiCurves(
            **whole | {"raw": False, "slope": (2,)}, n_jobs=-1
        ),
    }
    X, y = training_patches(options.stride)
    print(
        f"train: {len(X)} patches of the left halves; test: {options.patches} patches of each "
        f"right half; {SIZE}x{SIZE} pixels\n"
    )
    print(
        "accuracy".ljust(31) + "".join(name.rjust(10) for name in CONDITIONS) + "numbers".rjust(10)
    )
    accuracies = {}
    for name, curves in settings.items():
        classifier = LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto")
        model = make_pipeline(curves, StandardScaler(), classifier).fit(X, y)
        accuracies[name] = {
            condition: float(model.score(*test_patches(options.patches, change, seed)))
            for seed, (condition, change) in enumerate(CONDITIONS.items())
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
