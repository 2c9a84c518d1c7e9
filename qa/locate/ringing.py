"""Ringing kept out of vial averages.

An image is the truth seen through a truncated k-space: at an edge it overshoots by 9 % and rings on, falling slowly, so
that water around a vial reaches by some per cent of its own signal into the vial's middle, and that part does not decay
as the vial does. Hamming's window over k-space takes the ringing away at the price of a wider edge; in the image it is
the kernel (0.23, 0.54, 0.23) along rows and columns (Harris 1978, Proc. IEEE 66(1), 51-83).
"""

from __future__ import annotations

import numpy as np

from qa.words import Ints, Pixels

_SIDE, _MIDDLE = 0.23, 0.54


def calm(frames: Pixels) -> Pixels:
    """Frames as if Hamming's window had been laid over k-space.

    Parameters
    ----------
    frames : (frames, rows, columns); at the image's border its last voxels are repeated

    Returns
    -------
    (frames, rows, columns) float32, the same unit; the noise of a voxel is less and shared with its neighbours
    """
    wide = np.pad(np.asarray(frames, dtype=np.float32), ((0, 0), (1, 1), (1, 1)), mode="edge")
    down = np.float32(_SIDE) * (wide[:, :-2] + wide[:, 2:]) + np.float32(_MIDDLE) * wide[:, 1:-1]
    return np.asarray(np.float32(_SIDE) * (down[:, :, :-2] + down[:, :, 2:]) + np.float32(_MIDDLE) * down[:, :, 1:-1])


def independent_voxels(rows: Ints, columns: Ints) -> float:
    """How many voxels of independent noise are as good as the mean of calmed voxels at these places.

    The mean of calmed voxels is a weighted mean of the original ones; with weights w it is ``sum(w)**2 / sum(w**2)``.
    """
    if not len(rows):
        return 0.0
    weights = np.zeros((int(np.ptp(rows)) + 3, int(np.ptp(columns)) + 3), dtype=np.float32)
    weights[rows - rows.min() + 1, columns - columns.min() + 1] = 1.0
    spread = calm(weights[None])[0].astype(float)
    return float(spread.sum() ** 2 / (spread**2).sum())
