"""Compiled noise of the frames: one counter-based stream a pixel, so that results do not depend on threads."""

import math

import numba
import numpy as np

from hybridtrack.compiled import kernel

GOLDEN = np.uint64(0x9E3779B97F4A7C15)
MIX_1 = np.uint64(0xBF58476D1CE4E5B9)
MIX_2 = np.uint64(0x94D049BB133111EB)
S11, S27, S30, S31 = np.uint64(11), np.uint64(27), np.uint64(30), np.uint64(31)
MANY_ELECTRONS = 60.0  # from here on a rounded normal number stands for a Poisson number


@kernel
def uniform_at(stream, counter):  # type: ignore[no-untyped-def]
    """Number in [0, 1) at a place of a stream (splitmix64; Steele, Lea and Flood 2014)."""
    z = stream + GOLDEN * np.uint64(counter)
    z = (z ^ (z >> S30)) * MIX_1
    z = (z ^ (z >> S27)) * MIX_2
    z = z ^ (z >> S31)
    return np.float64(z >> S11) * (1.0 / 9007199254740992.0)


@kernel
def poisson(mean, u, normal):  # type: ignore[no-untyped-def]
    """Poisson number: by inversion of `u` where the mean is small, else from the standard normal number."""
    if mean <= 0.0:
        return 0.0
    if mean >= MANY_ELECTRONS:
        return max(0.0, math.floor(mean + math.sqrt(mean) * normal + 0.5))
    term = math.exp(-mean)
    total, count = term, 0
    while u > total and count < 400:
        count += 1
        term *= mean / count
        total += term
    return float(count)


@kernel(parallel=True)
def add_noise(light, gain, electrons_per_dn, read_noise_e, full_well_e, stream, out):  # type: ignore[no-untyped-def]
    """Light (rows, columns) in DN to noisy DN above black, written to `out`."""
    rows, columns = light.shape
    for row in numba.prange(rows):
        for column in range(columns):
            place = 4 * (row * columns + column)
            mean = light[row, column] * gain[row, column] * electrons_per_dn
            radius = math.sqrt(-2.0 * math.log(1.0 - uniform_at(stream, place)))
            angle = 2.0 * math.pi * uniform_at(stream, place + 1)
            electrons = poisson(mean, uniform_at(stream, place + 2), radius * math.cos(angle))
            electrons = min(electrons, full_well_e) + read_noise_e * radius * math.sin(angle)
            out[row, column] = electrons / electrons_per_dn
