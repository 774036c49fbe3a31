"""Keys of the counter-based random numbers behind the thermal noise.

Every link of every step gets its own 32-bit word, a mixing function of its counter and two keys that depend on seed and step
alone; each word gives three uniform numbers of 10 bits, one for each pair of components that exchanges over the link. A
weak scheme needs only the right mean and variance (Kloeden and Platen 1992, section 14.1), and the sum over links and
steps is Gaussian. Nothing is stored between steps, so that a resumed run goes on with the same bits.
"""

from __future__ import annotations

import numpy as np

_MASK = (1 << 64) - 1


def noise_keys(seed: int, step: int) -> tuple[np.uint32, np.uint32]:
    """Two keys of 32 bits from seed and step (the finaliser of SplitMix64; Steele, Lea and Flood 2014)."""
    word = _mix(_mix(seed & _MASK) ^ ((step + 1) * 0x9E3779B97F4A7C15 & _MASK))
    return np.uint32(word & 0xFFFFFFFF), np.uint32(word >> 32)


def _mix(word: int) -> int:
    word = (word + 0x9E3779B97F4A7C15) & _MASK
    word = ((word ^ (word >> 30)) * 0xBF58476D1CE4E5B9) & _MASK
    word = ((word ^ (word >> 27)) * 0x94D049BB133111EB) & _MASK
    return word ^ (word >> 31)
