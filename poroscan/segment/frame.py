"""Weight of whole particles for the frame that hides the ones it cuts."""

from __future__ import annotations

import math


def frame_weight(frame: tuple[int, int], box: tuple[int, int]) -> float:
    """Miles–Lantuéjoul weight of a particle that lies wholly inside the frame.

    With frame sides Z1, Z2 and the particle's Feret lengths x1, x2 along them, the chance that a particle placed at random is
    not cut is (Z1 − x1)(Z2 − x2)/(Z1 Z2); the weight is its inverse.

    Parameters
    ----------
    frame
        Rows and columns of the picture.
    box
        Rows and columns of the particle's bounding box, in pixels.

    Returns
    -------
    float
        Weight of at least 1; NaN where the particle is as large as the frame.

    References
    ----------
    R. E. Miles, in: Stochastic Geometry, ed. E. F. Harding and D. G. Kendall, Wiley 1974, 228;
    C. Lantuéjoul, Microscopica Acta Suppl. 4 (1980) 266.
    """
    room = (frame[0] - box[0]) * (frame[1] - box[1])
    return frame[0] * frame[1] / room if room > 0 and frame[0] > box[0] else math.nan
