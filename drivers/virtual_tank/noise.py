"""Slow noise: flicker as a function of time, so that no run depends on how it was cut."""

from __future__ import annotations

import numpy as np

from drivers.virtual_tank.mixing import Floats

PINK_S = 2**15  # seconds after which the noise repeats


def pink(rng: np.random.Generator) -> Floats:
    """PINK_S values, one a second, of noise with power as 1/f, standard deviation 1."""
    spectrum = rng.standard_normal(PINK_S // 2 + 1) + 1j * rng.standard_normal(PINK_S // 2 + 1)
    spectrum[0] = 0.0
    spectrum[1:] /= np.sqrt(np.arange(1, PINK_S // 2 + 1))
    wave = np.fft.irfft(spectrum, PINK_S)
    return np.asarray(wave / wave.std())


def at(wave: Floats, time_s: Floats) -> Floats:
    """The wave between its seconds, (n,)."""
    place = np.mod(time_s, wave.size)
    left = place.astype(np.int64)
    right = (left + 1) % wave.size
    part = place - left
    return wave[left] * (1 - part) + wave[right] * part
