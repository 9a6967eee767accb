"""Well-known texture descriptors as scikit-learn transformers, to compare `MinkowskiCurves` with.

They stand on scikit-image, SciPy and NumPy, and take patches as `MinkowskiCurves` does: an array
(n, h, w) or a list of 2-D arrays of bool, integers or floats; the vector's length, names and order
follow from the parameters alone. Each patch is standardised first, so that 8-bit images and height
maps in micrometres are alike to all of them; mean and standard deviation stand at the head of the
vector, as in `MinkowskiCurves` (``location_scale=False`` leaves them out). `GreyHistogram` and
`CoOccurrence` can learn a range of values from the training patches instead. Missing pixels (NaN
or masked) are an error unless ``missing="nearest"`` fills them.

Defaults were chosen on patches of 38 photographed surfaces under changes of light, rotation,
noise, blur and zoom, among a handful of settings each, for the best mean accuracy of two
classifiers.

References
----------
- Dalal, Triggs (2005), Histograms of oriented gradients for human detection, CVPR.
- Daubechies (1988), Orthonormal bases of compactly supported wavelets, Comm. Pure Appl. Math. 41.
- Dempster, Petitjean, Webb (2020), ROCKET: exceptionally fast and accurate time series
  classification using random convolutional kernels, Data Min. Knowl. Discov. 34.
- Guo, Zhang, Zhang (2010), A completed modeling of local binary pattern operator for texture
  classification, IEEE Trans. Image Process. 19.
- Haralick, Shanmugam, Dinstein (1973), Textural features for image classification, IEEE Trans.
  Syst. Man Cybern. 3.
- Laine, Fan (1993), Texture classification by wavelet packet signatures, IEEE PAMI 15.
- Lindeberg (1998), Feature detection with automatic scale selection, Int. J. Comput. Vis. 30.
- Mäenpää, Pietikäinen (2003), Multi-scale binary patterns for texture analysis, SCIA.
- Manjunath, Ma (1996), Texture features for browsing and retrieval of image data, IEEE PAMI 18.
- Ojala, Pietikäinen, Mäenpää (2002), Multiresolution gray-scale and rotation invariant texture
  classification with local binary patterns, IEEE PAMI 24.
- Shensa (1992), The discrete wavelet transform: wedding the à trous and Mallat algorithms, IEEE
  Trans. Signal Process. 40.
- Varma, Zisserman (2005), A statistical approach to texture classification from single images,
  Int. J. Comput. Vis. 62.
"""

from mfeat._descriptor_base import TextureDescriptor
from mfeat._descriptors_filters import FilterBank, GaborEnergies
from mfeat._descriptors_grey import CoOccurrence, GreyHistogram, LocalBinaryPatterns
from mfeat._descriptors_local import OrientedGradients, RandomKernels
from mfeat._descriptors_spectral import PowerSpectrum, WaveletEnergies

__all__ = [
    "DESCRIPTORS",
    "CoOccurrence",
    "FilterBank",
    "GaborEnergies",
    "GreyHistogram",
    "LocalBinaryPatterns",
    "OrientedGradients",
    "PowerSpectrum",
    "RandomKernels",
    "WaveletEnergies",
]

#: The descriptors by plain names, as the command line calls them.
DESCRIPTORS: dict[str, type[TextureDescriptor]] = {
    "grey-histogram": GreyHistogram,
    "local-binary-patterns": LocalBinaryPatterns,
    "co-occurrence": CoOccurrence,
    "gabor": GaborEnergies,
    "oriented-gradients": OrientedGradients,
    "filter-bank": FilterBank,
    "random-kernels": RandomKernels,
    "wavelets": WaveletEnergies,
    "power-spectrum": PowerSpectrum,
}
