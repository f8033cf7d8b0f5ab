"""Machine code kept between runs: found again, spoilt files ignored, size bounded."""

from __future__ import annotations

from pathlib import Path

import pytest

from vliwsim.native import cache


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
        import os

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
