"""Treatments of features, stand-ins for what a frozen network hands to a device.

Whatever a treatment learns, it learns from the first increment's training rows.
"""

import numpy as np

from hyperforecast.checks import InputError, check_choice, check_whole

TREATMENTS = ("raw", "pca", "fourier", "convolution")
POOL_SIDE = 4
KERNEL_SIDE = 3
CHUNK_ROWS = 512


def fit_treatment(features, dimension, first_rows, rng, *, image_shape=None):
    """Return a function from rows (n, d) to treated float32 rows (n, dimension), or None for raw features.

    Parameters
    ----------
    features : {"raw", "pca", "fourier", "convolution"}
        Principal components; random Fourier features (Rahimi & Recht 2007) of a Gaussian kernel whose length is
        sqrt(d) on standardized features; or fixed random 3x3 convolutions with ReLU, averaged over a 4x4 grid.
    dimension : int or None
        Number of features after treatment; None for raw features only. For convolutions a multiple of 16.
    first_rows : callable
        Gives the first increment's training rows of shape (n, d).
    rng : numpy Generator
    image_shape : (height, width), optional
        Sides of the image that the features are; multiples of 4; needed for convolutions.

    Raises
    ------
    InputError
    """
    check_choice("features", features, TREATMENTS)
    if features == "raw":
        if dimension is not None:
            raise InputError("dimension", "must be left out with raw features", dimension, "remove it, or set features")
        return None
    check_whole("dimension", dimension, low=1, high=65_536)
    if features == "pca":
        return _principal_components(first_rows(), dimension)
    if features == "fourier":
        return _fourier(first_rows(), dimension, rng)
    return _convolution(dimension, image_shape, rng)


def _principal_components(X, dimension):
    if dimension > min(len(X) - 1, X.shape[1]):
        raise InputError("dimension", f"must be at most {min(len(X) - 1, X.shape[1])}, the principal components of "
                         f"{len(X)} first rows of {X.shape[1]} features", dimension)
    mean = X.mean(axis=0)
    _, _, axes = np.linalg.svd((X - mean).astype(np.float64), full_matrices=False)
    axes = axes[:dimension]
    # Signs are fixed by each axis's largest weight, so that they do not hang on the library.
    axes *= np.sign(axes[np.arange(dimension), np.abs(axes).argmax(axis=1)])[:, None]
    axes = axes.T.astype(np.float32)
    return lambda rows: (rows - mean) @ axes


def _fourier(X, dimension, rng):
    mean, scale = X.mean(axis=0), X.std(axis=0)
    scale[scale == 0] = 1
    weights = (rng.standard_normal((X.shape[1], dimension)) / np.sqrt(X.shape[1])).astype(np.float32)
    phases = rng.uniform(0, 2 * np.pi, dimension).astype(np.float32)
    factor = np.float32(np.sqrt(2 / dimension))
    # A feature that hardly varied at first may later lie far out; clipping keeps its phase from being noise.
    return lambda rows: factor * np.cos(np.clip((rows - mean) / scale, -10, 10) @ weights + phases)


def _convolution(dimension, image_shape, rng):
    if image_shape is None:
        raise InputError("features", "must be raw, pca or fourier for rows that are not images", repr("convolution"))
    if dimension % POOL_SIDE**2:
        raise InputError("dimension", f"must be a multiple of {POOL_SIDE**2} with convolution", dimension)
    height, width = image_shape
    kernels = rng.standard_normal((KERNEL_SIDE**2, dimension // POOL_SIDE**2)).astype(np.float32)
    # Kernels that sum to zero see strokes, not paper.
    kernels -= kernels.mean(axis=0)

    def convolve_chunk(rows):
        images = np.pad(rows.reshape(-1, height, width), ((0, 0), (1, 1), (1, 1)))
        windows = np.lib.stride_tricks.sliding_window_view(images, (KERNEL_SIDE, KERNEL_SIDE), axis=(1, 2))
        maps = np.maximum(windows.reshape(-1, KERNEL_SIDE**2) @ kernels, 0)
        cells = maps.reshape(len(rows), POOL_SIDE, height // POOL_SIDE, POOL_SIDE, width // POOL_SIDE, -1)
        return cells.mean(axis=(2, 4)).reshape(len(rows), -1)

    def convolve(rows):
        return np.concatenate([convolve_chunk(rows[start:start + CHUNK_ROWS])
                               for start in range(0, len(rows), CHUNK_ROWS)])

    return convolve
