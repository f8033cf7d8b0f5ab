"""Damaged images. Most have a good checksum, so that what stands before it is judged too."""

from __future__ import annotations

import functools
import hashlib
import json
import tempfile
from pathlib import Path

from tests.kernel.sources import SUM
from tests.robustness.rows_cores import SMALL
from tests.robustness.workshop import Content, Row, a_folder, a_pipe
from vliwsim.kernel.loading import assemble_source
from vliwsim.program.assembler import assemble
from vliwsim.program.encoding.image import MAGIC


@functools.cache
def good() -> bytes:
    """The image of the kernel ``total``."""
    with tempfile.TemporaryDirectory() as folder:
        source = Path(folder) / "total.vliw"
        source.write_text(SUM)
        return assemble_source(str(source)).image


def sealed(body: bytes) -> bytes:
    """``body`` with its checksum behind it."""
    return body + hashlib.sha256(body).digest()


def parts(image: bytes) -> tuple[dict[str, object], bytes]:
    """The header and the code of an image."""
    end = image.index(b"\n", len(MAGIC))
    return json.loads(image[len(MAGIC) : end]), image[end + 1 : -32]


def with_target(address: int) -> bytes:
    """A good image whose branch to a register names another address."""
    text = "kernel back\ncore pair7\nstart:\n@0 jump g3 to start\n@1 halt\n"
    header, words = parts(assemble("back.vliw", text=text).image)
    line = json.dumps({**header, "targets": {"0": [address]}}, sort_keys=True, separators=(",", ":"))
    return sealed(MAGIC + line.encode() + b"\n" + words)


def with_header(**changes: object) -> bytes:
    """The good image with values of its header changed."""
    header, words = parts(good())
    text = json.dumps({**header, **changes}, sort_keys=True, separators=(",", ":"))
    return sealed(MAGIC + text.encode() + b"\n" + words)


def with_words(change: object) -> bytes:
    """The good image with other words, one of 8 bytes each; no digest, so that they are decoded."""
    header, words = parts(good())
    chunks = [words[k : k + 8] for k in range(0, len(words), 8)]
    changed = change(chunks)  # type: ignore[operator]
    text = json.dumps({**header, "words": len(changed)}, sort_keys=True, separators=(",", ":"))
    return sealed(MAGIC + text.encode() + b"\n" + b"".join(changed))


def refused(title: str, name: str | list[str], content: Content, options: str = "", **more: object) -> Row:
    """A file x.image that is no image."""
    names = [name] if isinstance(name, str) else name
    files = {"x.image": content, **more.pop("files", {})}  # type: ignore[dict-item]
    return Row(title, f"disassemble x.image -o x.vliw {options}", names, 2, files, **more)  # type: ignore[arg-type]


def rows() -> list[Row]:
    """The rows; made when asked for, since the good image has to be assembled."""
    image = good()
    header, words = parts(image)
    return [
        refused("empty", "not-an-image", b""),
        refused("a source", "not-an-image", SUM),
        refused("another version", "not-an-image", image.replace(b"image 1", b"image 2", 1)),
        refused("a pipe", "unreadable", a_pipe, process=True),
        refused("a folder", "unreadable", a_folder),
        refused("too big", "not-an-image", MAGIC + bytes(40_000_000)),
        refused("only its first line", "damaged-image", MAGIC),
        refused("cut in the middle", "damaged-image", image[: len(image) // 2]),
        refused("one bit flipped", "damaged-image", image[:200] + bytes([image[200] ^ 1]) + image[201:]),
        refused("a byte more", "damaged-image", image + b"\0"),
        refused("a header that is no JSON", "damaged-image", sealed(MAGIC + b"{bits}\n" + words)),
        refused("a header nested deep", "damaged-image", sealed(MAGIC + b"[" * 100_000 + b"\n" + words)),
        refused("a header with blanks", "damaged-image", sealed(MAGIC + json.dumps(header).encode() + b"\n" + words)),
        refused("words of seven bits", "damaged-image", with_header(bits=7)),
        refused("words of no bits", "damaged-image", with_header(bits=0)),
        refused("words counted wrong", "damaged-image", with_header(words=3)),
        refused("words counted in text", "damaged-image", with_header(words="12")),
        refused("labels that are no table", "damaged-image", with_header(labels=[1, 2])),
        refused("a label far outside", "label-nowhere", with_header(labels={"start": 1 << 40})),
        refused("targets of no branch", "targets-of-nothing", with_header(targets={"0": [0]})),
        refused("targets that are no table", "damaged-image", with_header(targets=[1])),
        refused("an empty table of targets", "damaged-image", with_header(targets={})),
        refused("targets out of order", "damaged-image", with_header(targets={"0": [8, 0]})),
        refused("targets of a place in words", "damaged-image", with_header(targets={"first": [0]})),
        refused("a target far outside", "target-nowhere", with_target(1 << 40)),
        refused("a label with a line break", "damaged-image", with_header(labels={"start:\n@0 halt": 0})),
        refused("a digest that is none", "damaged-image", with_header(digest=7)),
        refused("another digest", "other-core", with_header(digest="0" * 64)),
        refused("another core's words", ["bad-word"] * 3, with_header(digest="", core="lone4")),
        refused("a core that is a path", "unknown-core", with_header(core="../../etc/passwd")),
        refused("a core that is a file", "unknown-core", with_header(core="core.toml"), files={"core.toml": SMALL}),
        refused("a core nobody has", "unknown-core", with_header(core="pair8"), remedy="--core FILE"),
        refused("another core than the one asked for", "other-core", image, "--core lone4"),
        refused("words of zeros", ["bad-word"] * 4 + ["label-nowhere"], with_words(lambda w: [bytes(8)] * 4)),
        refused("words of ones", ["bad-word"] * 6 + ["label-nowhere"] * 2, with_words(lambda w: [b"\xff" * 8] * 4)),
        refused("no words", "no-code", with_words(lambda w: [])),
        refused("the last word missing", "label-nowhere", with_words(lambda w: w[:-1])),
        refused("the first word taken out", "label-nowhere", with_words(lambda w: w[1:])),
        Row("no such image", "disassemble none.image", ["unreadable"]),
    ]


ROWS = rows()
