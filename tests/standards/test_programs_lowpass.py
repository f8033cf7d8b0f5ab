"""The lowpass kernel against scipy.signal, on the ECG recording that PyWavelets carries (pywt.data.ecg).

An ECG is not a gearbox, but it is a real recording with a slow wave, sharp peaks and mains hum, and it is open data.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
import pywt
from scipy import signal

from vliwsim.description.places import programs_folder
from vliwsim.kernel.loaded import LoadedKernel, load_kernel

BLOCK = 128
STEP = 2.0**-15
"""One unit of q15."""


@cache
def kernel() -> LoadedKernel:
    return load_kernel(str(programs_folder() / "lowpass" / "lowpass.vliw"))


@cache
def taps() -> np.ndarray:
    """The kernel's table as its memory holds it, int64."""
    return kernel().run(x=np.zeros(40, np.int16)).setup.arrays["taps"].astype(np.int64)


def recording(level: float) -> np.ndarray:
    """The recording without its mean, scaled to ``level`` of full scale, as raw q15 (int16)."""
    ecg = pywt.data.ecg().astype(np.float64)
    ecg -= ecg.mean()
    return np.rint(ecg / np.abs(ecg).max() * level * 32767).astype(np.int16)


def filtered(x: np.ndarray) -> np.ndarray:
    """Raw q15 output for the whole recording, block by block, each headed by the 32 samples before it."""
    stream = np.concatenate([np.zeros(32, np.int16), x])
    runs = [kernel().run(x=stream[k : k + 32 + BLOCK]) for k in range(0, x.size, BLOCK)]
    assert all(run.ok for run in runs)
    return np.concatenate([run.outputs["y"] for run in runs])


def decibel(ratio: float) -> float:
    return float(10 * np.log10(ratio))


def test_the_taps_are_those_of_scipy() -> None:
    """scipy.signal.firwin, whose defaults are this window and a sum of one."""
    designed = signal.firwin(32, 0.2)
    assert np.array_equal(taps(), np.rint(32768 * designed).astype(np.int64))


def test_no_sum_can_overflow() -> None:
    """What the comment of the kernel says of its taps."""
    assert np.abs(taps()).sum() == 43488
    assert 43488 * 2**15 < 0.67 * 2**31
    assert taps().sum() == 2**15


@pytest.mark.parametrize("level", [0.5, 1.0])
def test_equal_bit_for_bit_to_an_exact_model(level: float) -> None:
    """scipy.signal.lfilter in binary64 adds these integers exactly: sums stay below 2**31."""
    x = recording(level)
    sums = signal.lfilter(taps().astype(np.float64), [1.0], x.astype(np.float64))
    assert np.array_equal(sums, np.convolve(x.astype(np.int64), taps())[: x.size])
    model = np.clip(np.floor(sums * STEP + 0.5), -32768, 32767)
    assert np.array_equal(filtered(x), model)


def test_extreme_samples_bit_for_bit_too() -> None:
    x = np.random.default_rng(15).choice(np.array([-32768, 32767], np.int16), 512)
    sums = signal.lfilter(taps().astype(np.float64), [1.0], x.astype(np.float64))
    model = np.clip(np.floor(sums * STEP + 0.5), -32768, 32767)
    assert np.abs(sums * STEP).max() > 32768, "something saturates"
    assert np.array_equal(filtered(x), model)


def test_signal_to_noise_against_the_filter_in_floats() -> None:
    """At half scale the output is 76.7 dB above its difference to scipy.signal.lfilter with unrounded taps.

    The noise must be what rounding explains, and nothing else: an output rounded to q15, uniform within half a unit,
    has STEP**2 / 12, and the rounded taps add what their errors make of this input. Half a decibel is left (0.02
    measured): the power of 1024 such errors spreads by 0.12 (standard deviation).
    """
    x = recording(0.5)
    designed = signal.firwin(32, 0.2)
    wanted = signal.lfilter(designed, [1.0], x * STEP)
    noise = np.mean((filtered(x) * STEP - wanted) ** 2)
    of_taps = np.mean(signal.lfilter(taps() * STEP - designed, [1.0], x * STEP) ** 2)
    assert decibel(np.mean(wanted**2) / noise) >= 76
    assert decibel(noise / (STEP**2 / 12 + of_taps)) == pytest.approx(0, abs=0.5)
