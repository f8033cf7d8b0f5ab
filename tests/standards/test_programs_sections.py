"""The sections kernel against scipy.signal, on the ECG recording that PyWavelets carries (pywt.data.ecg)."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
import pywt
from scipy import signal

from vliwsim.description.places import programs_folder
from vliwsim.kernel.loaded import LoadedKernel, load_kernel

BAND = (0.05, 0.2)
"""Edges of the passband, in halves of the sampling rate."""
STEP = 2.0**-31
"""One unit of q31."""
UNIT = 2.0**-29
"""One unit of the coefficients."""


@cache
def kernel() -> LoadedKernel:
    return load_kernel(str(programs_folder() / "sections" / "sections.vliw"))


@cache
def table() -> np.ndarray:
    """The kernel's coefficients, a row a section: three forward, two back with changed sign; int64."""
    return np.load(programs_folder() / "sections" / "coefficients.npy").astype(np.int64).reshape(3, 5)


def as_sections(rows: np.ndarray) -> np.ndarray:
    """The table's rows in the form scipy.signal takes."""
    return np.c_[rows[:, :3], np.full(3, 1 / UNIT), -rows[:, 3:]] * UNIT


@cache
def design() -> np.ndarray:
    """An elliptic bandpass, its gain spread so that no sine gets above full scale behind any section."""
    frequencies = np.linspace(0, np.pi, 4097)
    before, rows = np.ones(frequencies.size), []
    for section in signal.ellip(3, 0.5, 50, BAND, "bandpass", output="sos"):
        forward, back = section[:3] / section[:3].max(), section[3:]
        gain = before * np.abs(signal.freqz(forward, back, frequencies)[1])
        rows.append(np.r_[forward / gain.max(), back])
        before = gain / gain.max()
    return np.array(rows)


@cache
def recording() -> np.ndarray:
    """The recording without its mean, at half of full scale, as raw q31 (int32)."""
    ecg = pywt.data.ecg().astype(np.float64)
    ecg -= ecg.mean()
    return np.rint(ecg / np.abs(ecg).max() * 2**30).astype(np.int32)


@cache
def filtered() -> np.ndarray:
    """Raw q31 output for the whole recording, in blocks of different lengths that hand on the state."""
    state, parts = np.zeros(8, np.int32), []
    for block in np.split(recording(), [100, 357, 360, 900]):
        run = kernel().run(x=block, state=state)
        assert run.ok
        state = run.outputs["state"]
        parts.append(run.outputs["y"])
    return np.concatenate(parts)


def decibel(ratio: float) -> float:
    return float(10 * np.log10(ratio))


def test_the_table_is_the_design() -> None:
    """scipy.signal.ellip, rounded to the table's units."""
    assert np.array_equal(np.rint(design()[:, :3] / UNIT), table()[:, :3])
    assert np.array_equal(np.rint(-design()[:, 4:] / UNIT), table()[:, 3:])


def test_the_table_filters_as_its_comment_says() -> None:
    """0.5 dB of ripple, 50 dB down on both sides, no section above full scale for a sine; scipy.signal.freqz."""
    sections = as_sections(table())
    frequencies = np.linspace(0, 1, 8001)
    gains = np.ones(frequencies.size)
    for section in sections:
        gains = gains * np.abs(signal.freqz(section[:3], section[3:], frequencies * np.pi)[1])
        assert gains.max() < 1 + 1e-4
    inside = (frequencies >= BAND[0]) & (frequencies <= BAND[1])
    assert decibel(gains[inside].min() ** 2) > -0.51
    outside = (frequencies < 2 / 125) | (frequencies > 2 / 4)
    assert decibel(gains[outside].max() ** 2) < -49.9


def test_no_sum_can_overflow() -> None:
    """What the comment of the kernel says of its coefficients."""
    assert np.abs(table()).sum(axis=1).max() < 2**32
    assert np.abs(table()).sum(axis=1).max() * UNIT == pytest.approx(6.53, abs=0.005)


def test_equal_bit_for_bit_to_an_exact_model() -> None:
    """Direct form I with whole numbers of any length: NumPy convolves what is fed forward, feedback is a recurrence."""
    x = recording().astype(object)
    for b0, b1, b2, a1, a2 in table().tolist():
        forward = np.convolve(x, np.array([b0, b1, b2], object))[: x.size]
        y = [0, 0]
        for fed in forward:
            exact = fed + a1 * y[-1] + a2 * y[-2]
            y.append(min(max((2 * exact + 2**29) // 2**30, -(2**31)), 2**31 - 1))
        x = np.array(y[2:], object)
    assert np.array_equal(filtered(), x.astype(np.int64))


def noise_gain(section: int) -> float:
    """Power at the output for white noise of power 1 added where this section's output is rounded.

    It runs through the section's feedback and all sections behind it; the sum of squares of that impulse response.
    """
    rows = as_sections(table())[section:].copy()
    rows[0, :3] = (1, 0, 0)
    return float(np.sum(signal.sosfilt(rows, np.eye(1, 20000)[0]) ** 2))


def test_signal_to_noise_against_the_same_filter_in_floats() -> None:
    """142.3 dB above its difference to scipy.signal.sosfilt with the table's coefficients, in binary64.

    That is what rounding explains, and nothing else: each section rounds within half a unit, STEP**2 / 12, and
    what is behind makes of it what :func:`noise_gain` says. A decibel is left (0.5 measured): the last pair of poles
    makes a narrow band of the noise, and the power of 1024 samples of that spreads.
    """
    wanted = signal.sosfilt(as_sections(table()), recording() * STEP)
    noise = np.mean((filtered() * STEP - wanted) ** 2)
    assert decibel(np.mean(wanted**2) / noise) >= 142
    assert decibel(noise / (STEP**2 / 12 * sum(map(noise_gain, range(3))))) == pytest.approx(0, abs=1)


def test_signal_to_noise_against_the_design() -> None:
    """With the coefficients rounded as well, 141.4 dB above the difference to the design in binary64."""
    wanted = signal.sosfilt(design(), recording() * STEP)
    noise = np.mean((filtered() * STEP - wanted) ** 2)
    assert decibel(np.mean(wanted**2) / noise) >= 141
