"""Machine code kept between runs: found again, spoilt files ignored, size bounded."""

from __future__ import annotations

import hashlib
import multiprocessing
import os
import random
from pathlib import Path

import numpy as np
import pytest

from vliwsim.kernel.loaded import load_kernel
from vliwsim.native import cache, compiler


@pytest.fixture(autouse=True)
def own_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    cache.code_of.cache_clear()
    return cache.folder()


def test_what_is_written_is_read() -> None:
    assert cache.read("a" * 64) is None
    cache.write("a" * 64, b"code")
    assert cache.read("a" * 64) == b"code"
    assert [path.name for path in cache.folder().iterdir()] == ["a" * 64 + cache.ENDING]


@pytest.mark.parametrize("spoil", [lambda b: b[:-1], lambda b: b"", lambda b: b[:-1] + b"X", lambda b: b[:20]])
def test_a_spoilt_file_is_ignored(spoil: object) -> None:
    cache.write("b" * 64, b"some code")
    path = cache.folder() / ("b" * 64 + cache.ENDING)
    path.write_bytes(spoil(path.read_bytes()))  # type: ignore[operator]
    assert cache.read("b" * 64) is None


def test_the_least_used_goes_first() -> None:
    for k in range(8):
        cache.write(str(k) * 64, bytes(1000))
        os.utime(cache.folder() / (str(k) * 64 + cache.ENDING), (k, k))
    cache.shrink(5000)
    assert [cache.read(str(k) * 64) is not None for k in range(8)] == [False] * 6 + [True] * 2


def test_a_folder_that_cannot_be_made_keeps_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "file").write_text("")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "file"))
    cache.write("c" * 64, b"code")
    assert cache.read("c" * 64) is None
    assert cache.clear() == 0


def test_code_comes_from_the_cache(monkeypatch: pytest.MonkeyPatch) -> None:
    text = "define i32 @seven() {\n  ret i32 7\n}\n"
    cache.code_of(text, 1)
    cache.code_of.cache_clear()
    monkeypatch.setattr(cache, "compile_text", lambda *_: pytest.fail("compiled again"))
    assert cache.code_of(text, 1).address("seven")
    assert cache.clear() == 1


def test_names_tell_texts_and_efforts_apart() -> None:
    assert len({cache.key("a", 1), cache.key("b", 1), cache.key("a", 2)}) == 3


def test_code_for_another_processor_is_not_found(monkeypatch: pytest.MonkeyPatch) -> None:
    """The shared home of unlike machines: each keeps its own."""
    text = "define i32 @seven() {\n  ret i32 7\n}\n"
    here = cache.key(text, 1)
    cache.write(here, b"ours")
    name, features = compiler.host()
    for other in (("another", features), (name, features + ",+more")):
        monkeypatch.setattr(cache, "host", lambda other=other: other)
        assert cache.key(text, 1) != here
        assert cache.read(cache.key(text, 1)) is None
    assert cache.read(here) == b"ours"


def test_a_spoilt_file_is_written_again_and_the_run_is_right() -> None:
    energy = load_kernel("energy")
    x = np.arange(64, dtype=np.int16)
    wanted = energy.run(x=x).outputs["total"]
    energy.run_many([{"x": x}])
    files = sorted(cache.folder().iterdir())
    for k, path in enumerate(files):
        whole = path.read_bytes()
        path.write_bytes((whole[:-7], b"", bytes(len(whole)), whole[:99] + b"?" + whole[100:])[k % 4])
    cache.code_of.cache_clear()
    assert load_kernel("energy").run_many([{"x": x}]).outputs["total"][0] == wanted
    assert sorted(cache.folder().iterdir()) == files
    for path in files:
        content = path.read_bytes()
        assert hashlib.sha256(content[32:]).digest() == content[:32]


@pytest.mark.skipif(not hasattr(os, "getuid"), reason="no owners")
def test_a_folder_that_others_may_write_into_is_not_used() -> None:
    cache.write("d" * 64, b"code")
    cache.folder().chmod(0o777)
    assert cache.read("d" * 64) is None
    cache.write("e" * 64, b"code")
    assert len(list(cache.folder().iterdir())) == 1
    cache.folder().chmod(0o700)
    assert cache.read("d" * 64) == b"code"


@pytest.mark.skipif(not hasattr(os, "getuid"), reason="no owners")
def test_a_folder_of_somebody_else_is_not_used(monkeypatch: pytest.MonkeyPatch) -> None:
    cache.write("d" * 64, b"code")
    monkeypatch.setattr(os, "getuid", lambda: 12345)
    assert cache.read("d" * 64) is None


@pytest.mark.skipif(not hasattr(os, "getuid") or os.getuid() == 0, reason="root may write anywhere")
def test_a_folder_that_cannot_be_written_is_only_read() -> None:
    cache.write("d" * 64, b"code")
    cache.folder().chmod(0o500)
    cache.write("e" * 64, b"code")
    assert (cache.read("d" * 64), cache.read("e" * 64)) == (b"code", None)


def test_a_full_disk_keeps_nothing(monkeypatch: pytest.MonkeyPatch) -> None:
    def full(*_: object) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", full)
    cache.write("d" * 64, b"code")
    assert not list(cache.folder().iterdir())


def content_of(name: str) -> bytes:
    """What belongs under a name, some kilobytes."""
    return hashlib.sha256(name.encode()).digest() * (100 + int(name[:2], 16))


def busy(seed: int, times: int) -> int:
    """Write, read, shrink and clear as fast as it goes; how often something was read."""
    draw, read = random.Random(seed), 0
    for _ in range(times):
        name = f"{draw.randrange(24):02x}" + "0" * 62
        what = draw.random()
        if what < 0.45:
            cache.write(name, content_of(name))
        elif what < 0.95:
            found = cache.read(name)
            assert found is None or found == content_of(name)
            read += found is not None
        elif what < 0.99:
            cache.shrink(40_000)
        else:
            cache.clear()
    return read


def test_many_processes_share_the_folder() -> None:
    """Whoever reads gets all of it or nothing, whatever others write, drop and clear; nothing is left over."""
    with multiprocessing.get_context("spawn").Pool(4) as pool:
        read = pool.starmap(busy, [(seed, 3000) for seed in range(4)])
    assert min(read) > 10
    assert all(path.suffix == cache.ENDING for path in cache.folder().iterdir())
    cache.shrink(40_000)
    assert sum(path.stat().st_size for path in cache.folder().iterdir()) <= 40_000


def translated(seed: int) -> list[int]:
    """A kernel translated, in a process of its own."""
    x = np.random.default_rng(seed).integers(-900, 900, (3, 16)).astype(np.int16)
    totals = load_kernel("energy").run_many({"x": x}).outputs["total"]
    return [int(total) for total in totals] + [int(total) for total in (x.astype(int) ** 2).sum(axis=1)]


def test_processes_that_translate_the_same_at_once() -> None:
    with multiprocessing.get_context("spawn").Pool(3) as pool:
        found = pool.map(translated, range(6), 1)
    assert all(one[:3] == one[3:] for one in found)
    names = [path.name for path in cache.folder().iterdir()]
    assert names
    assert all(name.endswith(cache.ENDING) for name in names)
