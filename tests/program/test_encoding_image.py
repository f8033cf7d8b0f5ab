"""The image file: what comes back is what was written, and nothing else is taken for an image."""

from __future__ import annotations

import hashlib
import json
import os
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from vliwsim.problems import ImageError
from vliwsim.program.encoding.image import MAGIC, Image, from_bytes, read_image, to_bytes, write_image

SAMPLE = Image("pair7", 64, (1 << 63 | 5, 0, 77), {"start": 0, "loop": 8}, "ab" * 32)


def sealed(body: bytes) -> bytes:
    """Bytes with a right checksum behind them: what a clever stranger would send."""
    return body + hashlib.sha256(body).digest()


@settings(max_examples=60, deadline=None)
@given(
    bits=st.sampled_from([32, 40, 64, 128]),
    values=st.lists(st.integers(0, 2**128 - 1), max_size=9),
    core=st.text(max_size=9),
    labels=st.dictionaries(st.from_regex(r"\A[A-Za-z_]\w{0,9}\Z"), st.integers(0, 2**31)),
)
def test_an_image_comes_back(bits: int, values: list[int], core: str, labels: dict[str, int]) -> None:
    image = Image(core, bits, tuple(v & (1 << bits) - 1 for v in values), labels, "d")
    assert read_image(to_bytes(image)) == image
    assert to_bytes(read_image(to_bytes(image))) == to_bytes(image)


def test_the_format_is_as_documented() -> None:
    # SHA-256 (FIPS 180-4) as Python's hashlib has it.
    body = (
        b"vliwsim image 1\n"
        b'{"bits":64,"core":"pair7","digest":"' + b"ab" * 32 + b'","labels":{"loop":8,"start":0},"words":3}\n'
        b"\x05\0\0\0\0\0\0\x80" + bytes(8) + b"M" + bytes(7)
    )
    assert to_bytes(SAMPLE) == body + hashlib.sha256(body).digest()


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_damage_is_always_noticed(data: st.DataObject) -> None:
    good = to_bytes(SAMPLE)
    at = data.draw(st.integers(0, len(good) - 1))
    flipped = good[:at] + bytes([good[at] ^ data.draw(st.integers(1, 255))]) + good[at + 1 :]
    cut = good[: data.draw(st.integers(0, len(good) - 1))]
    for bad in (flipped, cut, good + b"\0"):
        with pytest.raises(ImageError):
            from_bytes(bad)


@settings(max_examples=150, deadline=None)
@given(st.one_of(st.binary(max_size=200), st.binary(max_size=200).map(lambda b: sealed(MAGIC + b))))
def test_strangers_bytes_are_refused(data: bytes) -> None:
    with pytest.raises(ImageError):
        from_bytes(data)


GOOD = {"bits": 64, "core": "pair7", "digest": "", "labels": {}, "words": 0}


@pytest.mark.parametrize(
    ("header", "code"),
    [
        ({**GOOD, "bits": 63}, b""),
        ({**GOOD, "bits": 0}, b""),
        ({**GOOD, "bits": True}, b""),
        ({**GOOD, "bits": 8192}, b""),
        ({**GOOD, "words": -1}, b""),
        ({**GOOD, "words": 1}, b""),
        ({**GOOD, "words": 10**30}, b""),
        (GOOD, bytes(8)),
        ({**GOOD, "core": 5}, b""),
        ({**GOOD, "labels": []}, b""),
        ({**GOOD, "labels": {"a b": 0}}, b""),
        ({**GOOD, "labels": {"a\nb:": 0}}, b""),
        ({**GOOD, "labels": {"a": -1}}, b""),
        ({**GOOD, "labels": {"a": 1.5}}, b""),
        ({**GOOD, "more": 1}, b""),
        ([], b""),
        (None, b""),
    ],
)
def test_bad_headers_with_right_checksums(header: object, code: bytes) -> None:
    line = json.dumps(header, sort_keys=True, separators=(",", ":")).encode()
    with pytest.raises(ImageError):
        from_bytes(sealed(MAGIC + line + b"\n" + code))


@pytest.mark.parametrize(
    "line",
    [
        b"[" * 100_000,
        b"9" * 10_000,
        b'{"bits": 64}',
        b'{"bits":64,"bits":64}',
        b"NaN",
        b"\xff\xfe",
        b'{"a":1e999}',
        b"",
    ],
    ids=["deep", "long number", "spaces", "repeated key", "nan", "not text", "infinite", "empty"],
)
def test_hostile_json_is_refused(line: bytes) -> None:
    with pytest.raises(ImageError):
        from_bytes(sealed(MAGIC + line + b"\n"))


def test_files(tmp_path: Path) -> None:
    path = tmp_path / "kernel.image"
    write_image(path, SAMPLE)
    assert read_image(path) == SAMPLE
    other = Image("lone2", 64, (1,))
    with pytest.raises(ImageError, match="there already"):
        write_image(path, other)
    assert read_image(path) == SAMPLE
    write_image(path, other, overwrite=True)
    assert read_image(path) == other
    assert os.listdir(tmp_path) == ["kernel.image"]


def test_files_that_cannot_be_used(tmp_path: Path) -> None:
    with pytest.raises(ImageError, match="No such file"):
        read_image(tmp_path / "nothing")
    with pytest.raises(ImageError, match="unreadable"):
        read_image(tmp_path)
    with pytest.raises(ImageError, match="unreadable"):
        read_image("a\0b")
    with pytest.raises(ImageError, match="unwritable"):
        write_image(tmp_path / "no" / "folder", SAMPLE)
    with pytest.raises(ImageError):
        write_image(tmp_path, SAMPLE, overwrite=True)
    assert os.listdir(tmp_path) == []


def test_a_file_appears_whole_or_not_at_all(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def fail(*_: object) -> None:
        raise OSError(28, "No space left on device")

    path = tmp_path / "kernel.image"
    monkeypatch.setattr(os, "replace", fail)
    with pytest.raises(ImageError, match="No space"):
        write_image(path, SAMPLE, overwrite=True)
    assert os.listdir(tmp_path) == []
    monkeypatch.undo()
    monkeypatch.setattr(os, "link", fail)  # as on file systems without links
    write_image(path, SAMPLE)
    with pytest.raises(ImageError, match="there already"):
        write_image(path, SAMPLE)
    assert read_image(path) == SAMPLE
