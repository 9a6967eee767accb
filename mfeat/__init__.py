"""Minkowski curves of image patches as feature vectors, in physical units."""

from mfeat.counts import PatternCounts, count_patterns
from mfeat.curves import Curves, minkowski_curves
from mfeat.patches import PatchGrid
from mfeat.transformer import MinkowskiCurves

__version__ = "0.1.0"

__all__ = [
    "Curves",
    "MinkowskiCurves",
    "PatchGrid",
    "PatternCounts",
    "count_patterns",
    "minkowski_curves",
]
