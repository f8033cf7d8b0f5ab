"""The crest kernel against binary64 and exact arithmetic, on the ECG recording of PyWavelets (pywt.data.ecg)."""

from __future__ import annotations

import importlib.util
from fractions import Fraction
from functools import cache
from types import ModuleType

import numpy as np
import pywt

from vliwsim.description.places import programs_folder
from vliwsim.kernel.loaded import LoadedKernel, load_kernel

FOLDER = programs_folder() / "crest"
HALF = 2.0**-24
"""The relative error of one rounding to binary32 (IEEE 754), half a unit in the last place."""


@cache
def kernel() -> LoadedKernel:
    return load_kernel(str(FOLDER / "crest.vliw"))


@cache
def reference() -> ModuleType:
    spec = importlib.util.spec_from_file_location("crest_reference", FOLDER / "reference.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def assert_close_to_binary64(x: np.ndarray) -> None:
    """Within what roundings can do: sums have only positive terms, and no term is rounded more than ten times.

    (A product, seven more with their additions, two additions; the scale is exact.) So a mean is within 10 halves of a
    unit, its root within half of that and one more, a quotient within yet another.
    """
    run = kernel().run(x=x)
    assert run.ok
    windows = x.reshape(-1, 32).astype(np.float64)
    rms = np.sqrt(np.mean(windows**2, axis=1))
    crest = np.abs(windows).max(axis=1) / rms
    assert np.all(np.abs(run.outputs["rms"] / rms - 1) <= 6.01 * HALF)
    assert np.all(np.abs(run.outputs["crest"] / crest - 1) <= 7.01 * HALF)


def test_a_recording_as_numpy_has_it_in_binary64() -> None:
    ecg = pywt.data.ecg().astype(np.float64)
    assert_close_to_binary64(((ecg - ecg.mean()) / 200).astype(np.float32))


def test_noise_of_all_levels_as_numpy_has_it_in_binary64() -> None:
    random = np.random.default_rng(24)
    levels = np.repeat(2.0 ** random.uniform(-40, 40, 200), 32)
    assert_close_to_binary64((random.normal(0, 1, levels.size) * levels).astype(np.float32))


def rounded(exact: Fraction) -> np.float32:
    """The binary32 number nearest to it, of two the one with the even last bit; by comparing exact distances."""
    near = np.float32(float(exact))
    candidates = [near, np.nextafter(near, np.float32(np.inf)), np.nextafter(near, np.float32(-np.inf))]
    return min(candidates, key=lambda c: (abs(Fraction(float(c)) - exact), int(c.view(np.uint32)) & 1))


def test_the_references_multiply_add_rounds_once() -> None:
    """Against exact fractions, on random triples and on some that two roundings get wrong."""
    random = np.random.default_rng(25)
    a, b, c = (
        (random.uniform(1, 2, 4000) * 2.0 ** random.integers(-12, 13, 4000)).astype(np.float32) for _ in range(3)
    )
    # x = 1 + 2**-12: x**2 = 1 + 2**-11 + 2**-24. With c = 2**-60 the sum is just above a tie, with -c just below.
    hard = np.float32(1 + 2.0**-12)
    a = np.concatenate([a, [hard] * 3]).astype(np.float32)
    b = np.concatenate([b, [hard] * 3]).astype(np.float32)
    c = np.concatenate([c, [2.0**-60, -(2.0**-60), 0]]).astype(np.float32)
    once = reference().multiply_add(a, b, c)
    exact = [Fraction(float(i)) * Fraction(float(j)) + Fraction(float(k)) for i, j, k in zip(a, b, c, strict=True)]
    assert [rounded(e) for e in exact] == list(once)
    assert once[-3] != once[-2], "the tie is decided by c"
    twice = (a.astype(np.float64) * b + c).astype(np.float32)
    assert np.any(twice != once), "two roundings would not do"
