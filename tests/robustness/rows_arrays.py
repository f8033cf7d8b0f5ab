"""Damaged arrays: given ones, and tables beside a source."""

from __future__ import annotations

import io
import zipfile

import numpy as np

from tests.robustness.workshop import Content, Row, a_folder, a_pipe, link_to, npy, npy_with_header

GOOD = npy(np.array([1, 2, 3], np.int16))
HEADER = "{'descr': '<i2', 'fortran_order': False, 'shape': (%s,), }"


def given(title: str, name: str, content: Content | None, **more: object) -> Row:
    """An array file that is given for ``x`` of the kernel ``total``."""
    files = {} if content is None else {"x.npy": content}
    return Row(title, "run total --give x=x.npy", [name], 2, files, **more)  # type: ignore[arg-type]


def shaped(title: str, name: str, header: str, options: str, **more: object) -> Row:
    """A kernel with an interface of its own, and three elements for its ``x``."""
    files = {"probe.vliw": f"kernel probe\ncore pair7\n{header}start:\n@0 halt\n"}
    give = "" if "--give x" in options else "--give x=1,2,3"
    return Row(title, f"run probe.vliw {give} {options}", [name], 2, files, **more)  # type: ignore[arg-type]


def archive() -> bytes:
    """Several arrays in one file."""
    stream = io.BytesIO()
    np.savez(stream, x=np.arange(3), y=np.arange(2))
    return stream.getvalue()


def bomb() -> bytes:
    """An archive of a few kilobytes that unpacks to a gigabyte."""
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as out, out.open("x.npy", "w") as file:
        for _ in range(16):
            file.write(bytes(1 << 20))
    return stream.getvalue()


def header(text: str, data: bytes = b"", version: bytes = b"\x01\x00") -> bytes:
    return npy_with_header(text, data, version)


DAMAGED = [
    given("not there", "array-file", None),
    given("empty", "array-file", b""),
    given("text", "array-file", "1, 2, 3\n"),
    given("a folder", "array-file", a_folder),
    given("a pipe", "array-file", a_pipe, process=True),
    given("a link to itself", "array-file", link_to("x.npy")),
    given("an archive", "array-file", archive(), says="numpy.save"),
    given("an archive that unpacks to much", "array-file", bomb()),
    given("only the magic number", "array-file", GOOD[:6]),
    given("cut in its header", "array-file", GOOD[:40]),
    given("cut in its data", "array-file", GOOD[:-1]),
    given("another version", "array-file", GOOD[:6] + b"\x09\x00" + GOOD[8:]),
    given("a header that is no dict", "array-file", header("[1, 2]")),
    given(
        "a header that is code", "array-file", header("{'descr': __import__('os').system('touch x'), 'shape': (1,)}")
    ),
    given("a header without a shape", "array-file", header("{'descr': '<i2', 'fortran_order': False}")),
    given("a type that is none", "array-file", header(HEADER.replace("<i2", "<q9") % "1", b"\0\0")),
    given("more elements than bytes", "array-file", header(HEADER % "4", b"\0\0")),
    given("more elements than atoms", "array-file", header(HEADER % ("9" * 30), b"\0\0")),
    given("fewer elements than none", "array-file", header(HEADER % "-1", b"\0\0")),
    given("half an element", "array-file", header(HEADER % "1.5", b"\0\0")),
    given("true elements", "array-file", header(HEADER % "True", b"\0\0")),
    given("a header of four gigabytes", "array-file", b"\x93NUMPY\x02\x00\xff\xff\xff\xff" + b" " * 99),
    given("a header nested deep", "array-file", header("(" * 5000 + ")" * 5000)),
    given("pickled objects", "array-file", npy(np.array([{}, None], object), allow_pickle=True)),
    Row("a device without end", "run total --give x=/dev/zero", ["array-file"], process=True),
]

WRONG = [
    given("complex numbers", "array-type", npy([1j])),
    given("text elements", "array-type", npy(["a", "b"])),
    given("truth values", "array-type", npy([True])),
    given("dates", "array-type", npy(np.array(["2020-01-01"], "M8[D]"))),
    given("records", "array-type", npy(np.zeros(2, "i2,i4"))),
    given("two dimensions", "array-shape", npy(np.zeros((2, 2), np.int16))),
    given("thirty dimensions", "array-shape", npy(np.zeros((1,) * 30, np.int16))),
    given("no dimension", "array-shape", npy(np.int16(3))),
    given("floats for integers", "array-type", npy([1.5, 2.0])),
    given("not a number", "array-type", npy([np.nan])),
    given("too big for its type", "value-range", npy([70000])),
    given("too big for any type", "value-range", npy([np.uint64(1 << 63)])),
    given("no elements", "needs-violated", npy(np.zeros(0, np.int16))),
    given("more than memory holds", "memory-too-small", npy(np.zeros(100_000, np.int16)), remedy="memory.size"),
    shaped("infinite fractions", "not-finite", "given x : q15[n] at g1\n", "--give x=0.5,inf"),
    shaped("lengths that differ", "size-conflict", "given x : i8[n] at g1\ngiven y : i8[n] at g2\n", "--give y=1,2"),
    shaped("a length that no size gives", "array-length", "given x : i16[2 * n] at g1\n", "--give n=2"),
    shaped("a length without its size", "size-unknown", "given x : i16[2 * n] at g1\n", "", remedy="n="),
]

TABLE = 'kernel probe\ncore pair7\ntable t : i16[4] from "t.npy" at g1\nstart:\n@0 halt\n'


def table(title: str, name: str, content: Content, source: str = TABLE, **more: object) -> Row:
    """A table t.npy beside a source, which it does not fit."""
    return Row(title, "run probe.vliw", [name], 2, {"probe.vliw": source, "t.npy": content}, **more)  # type: ignore[arg-type]


TABLES = [
    table("an empty table", "table-file", b""),
    table("a table of text", "table-file", "1, 2, 3, 4\n"),
    table("a table cut off", "table-file", npy(np.arange(4, dtype=np.int16))[:-3]),
    table("a table of objects", "table-file", npy(np.array([{}] * 4, object), allow_pickle=True)),
    table("a table that is a pipe", "table-file", a_pipe, process=True),
    table("a table by a link out of the folder", "table-file", link_to("/etc/hostname")),
    table("a table too short", "array-length", npy(np.arange(3, dtype=np.int16))),
    table("a table too wide", "value-range", npy(np.array([0, 0, 0, 70000]))),
    table("a table of two dimensions", "array-length", npy(np.zeros((2, 2), np.int16))),
    table("a table of words", "array-type", npy(["a", "b", "c", "d"])),
]

ROWS = [*DAMAGED, *WRONG, *TABLES]
