"""The demonstration's scenario: a burst over a weather station's radio hop, and the score of its LLRs.

A station on a ridge sends its readings, scrambled, to the valley over a microwave hop in 128-QAM. Rain and a
little reflected signal make the gain wander, slowly against a symbol, so that the receiver knows it.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from pydemap.constellation import cross_qam
from pydemap.recording import replacing, write_sigmf

__all__ = ["Burst", "Score", "record_burst", "score"]

ORDER = 128
SYMBOLS = 300_000
ES_N0_DB = (
    24.0  # at unit gain: some symbols in a hundred are decided wrongly, and their LLRs tell which may be
)
RICE_FACTOR = 20.0  # power of the direct path over that of all reflected ones
REFLECTED_PATHS = 8
FASTEST_FADE = 1e-4  # Doppler shift of the reflected paths, at most, in cycles a symbol


@dataclass(frozen=True)
class Burst:
    """Where a recorded burst lies, and its noise variance N0 (both dimensions together)."""

    recording: Path
    gain: Path
    bits: Path
    noise_variance: float


@dataclass(frozen=True)
class Score:
    """What LLRs are worth against the bits sent."""

    llrs: int
    bits_per_symbol: int
    errors: int
    information: float  # bits a symbol


def record_burst(directory: Path, seed: int) -> Burst:
    """Make a burst and write its samples (SigMF), gains and bits (.npy) into a directory that exists.

    Raises
    ------
    RecordingError
        A file cannot be written.
    """
    rng = np.random.default_rng(seed)
    constellation = cross_qam(ORDER)
    bits = rng.integers(0, 2, (SYMBOLS, constellation.bits_per_symbol), np.uint8)
    gain = _rician_gain(rng).astype(np.complex64)
    noise_variance = float(constellation.mean_energy * 10 ** (-ES_N0_DB / 10))
    noise = rng.normal(scale=np.sqrt(noise_variance / 2), size=(SYMBOLS, 2)) @ np.array([1, 1j])
    samples = (gain * constellation.map(bits) + noise).astype(np.complex64)

    burst = Burst(
        directory / "burst.sigmf-meta",
        directory / "burst-gain.npy",
        directory / "burst-bits.npy",
        noise_variance,
    )
    write_sigmf(
        burst.recording.with_suffix(""),
        samples,
        fields={
            "core:sample_rate": 25e6,
            "core:description": "128-QAM burst over a fading microwave hop, one sample a symbol, "
            f"N0 = {noise_variance!r}",
            "core:recorder": "pydemap demo",
        },
        capture={"core:frequency": 18.7e9},
    )
    with replacing(burst.gain, burst.bits) as (gain_file, bits_file):
        np.save(gain_file, gain)
        np.save(bits_file, bits)
    return burst


def score(bits: NDArray[np.uint8], llr: NDArray[np.float32]) -> Score:
    """Compare LLRs (positive means 0) with the bits sent, both of shape (symbols, n).

    The information that the LLR L of a bit b carries is 1 - E[log2(1 + exp(-(1 - 2b) L))], here the mean
    over the burst, and added over the bits of a symbol. S. ten Brink, "Convergence behavior of iteratively
    decoded parallel concatenated codes", IEEE Trans. Commun. 49(10), 2001 (from memory).
    """
    toward_truth = np.where(bits == 0, llr, -llr).astype(np.float64)
    lost = np.logaddexp(0, -toward_truth).mean(axis=0) / np.log(2)
    errors = int(np.count_nonzero((llr < 0) != (bits == 1)))
    return Score(bits.size, bits.shape[1], errors, float(np.sum(1 - lost)))


def _rician_gain(rng: np.random.Generator) -> NDArray[np.complex128]:
    """One direct path and a few reflected ones, each with a Doppler shift of its own; unit mean power."""
    time = np.arange(SYMBOLS)
    direct = np.exp(2j * np.pi * rng.random()) * np.ones(SYMBOLS)
    reflected = np.zeros(SYMBOLS, np.complex128)
    for _ in range(REFLECTED_PATHS):
        shift = FASTEST_FADE * rng.uniform(-1, 1)
        reflected += np.exp(2j * np.pi * (shift * time + rng.random())) / np.sqrt(REFLECTED_PATHS)
    gain: NDArray[np.complex128] = (np.sqrt(RICE_FACTOR) * direct + reflected) / np.sqrt(RICE_FACTOR + 1)
    return gain
