"""Minkowski curves of image patches as feature vectors, in physical units."""

__version__ = "0.1.0"  # before the imports: tables and their workers carry it

from mfeat.compare import compare
from mfeat.comparison import Comparison, read_comparison
from mfeat.counts import PatternCounts, count_patterns
from mfeat.curves import Curves, minkowski_curves
from mfeat.dump import dump
from mfeat.patches import PatchGrid
from mfeat.table import FeatureTable, read_table
from mfeat.transformer import MinkowskiCurves

__all__ = [
    "Comparison",
    "Curves",
    "FeatureTable",
    "MinkowskiCurves",
    "PatchGrid",
    "PatternCounts",
    "compare",
    "count_patterns",
    "dump",
    "minkowski_curves",
    "read_comparison",
    "read_table",
]
