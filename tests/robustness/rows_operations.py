"""Malformed tables of operations, each named by a core beside it."""

from __future__ import annotations

from tests.robustness.workshop import Content, Row, a_folder, a_pipe

PEAK = """\
[peak.fade]
code     = 0x300
class    = "arithmetic"
operands = "d:i32, a:i32, b:i32"
does     = "d = max(sat(abs(a)), 63 * b >> 6)"
summary  = "the greater of |a| and 63/64 of the old peak b"
examples = [[[100, 64], [100]], [[-3, 6400], [6300]], [[-2147483648, 0], [2147483647]]]
"""
"""The operation of isa/README.md."""

CORE = 'base = "lone4"\noperations = ["integer", "memory", "control", "mine.toml"]\n'
DOES = '"d = max(sat(abs(a)), 63 * b >> 6)"'
EXAMPLES = "[[[100, 64], [100]], [[-3, 6400], [6300]], [[-2147483648, 0], [2147483647]]]"


def refused(title: str, names: str | list[str], content: Content, **more: object) -> Row:
    """A file mine.toml that is no table of operations."""
    listed = [names] if isinstance(names, str) else names
    return Row(title, "ops --core core.toml", listed, 2, {"core.toml": CORE, "mine.toml": content}, **more)  # type: ignore[arg-type]


def but(old: str, new: str) -> str:
    """The operation with one thing replaced."""
    assert PEAK.count(old) == 1
    return PEAK.replace(old, new)


def meaning(
    title: str, names: str | list[str], does: str, operands: str = "d:i32, a:i32, b:i32", **more: object
) -> Row:
    """An operation that means ``does``."""
    table = but(DOES, f"'''{does}'''").replace("d:i32, a:i32, b:i32", operands).replace(EXAMPLES, "[]")
    return refused(title, names, table, **more)


FILES = [
    refused("no TOML", "bad-toml", "d = a + b\n"),
    refused("half a table", "bad-toml", PEAK[:150]),
    refused("bytes that are no text", "bad-toml", PEAK.encode() + b"\xff"),
    refused("zero bytes", "bad-toml", bytes(32)),
    refused("a file too big", "cannot-read", PEAK + "#" * 9_000_000),
    refused("a folder", "unknown-file", a_folder),
    refused("a pipe", "unknown-file", a_pipe, process=True),
    refused("a table twice", "bad-toml", PEAK + PEAK),
]

KEYS = [
    refused("no code", "missing-key", but("code     = 0x300\n", "")),
    refused("no meaning", "missing-key", but(f"does     = {DOES}\n", "")),
    refused("a code of text", "bad-value", but("0x300", '"0x300"')),
    refused("a code too big", "bad-value", but("0x300", "4096")),
    refused("a code of another operation", "code-taken", but("0x300", "1")),
    refused("a name of another operation", "name-taken", but("[peak.fade]", "[add]")),
    refused("a class with the name of a latency", "bad-value", but('"arithmetic"', '"update"')),
    refused("a key nobody has", "unknown-key", PEAK + "colour = 3\n"),
    refused("a name in capitals", "bad-name", but("[peak.fade]", "[PEAK]")),
    refused("an operand without a type", "bad-operand", but("a:i32", "a")),
    refused("an operand of a type nobody has", "bad-operand", but("a:i32", "a:i31")),
    refused("an operand twice", "bad-operand", but("b:i32", "a:i32")),
    refused("examples that are no list", "bad-value", but(EXAMPLES, "3")),
    refused("an example of one input", "bad-example", but("[[100, 64], [100]]", "[[100], [100]]")),
    refused("an example out of range", "bad-example", but("[[100, 64], [100]]", "[[4294967296, 64], [100]]")),
    refused("an example that is wrong", "example-fails", but("[[100, 64], [100]]", "[[100, 64], [101]]")),
    refused(
        "four mistakes, all said",
        ["bad-operand", "missing-key", "bad-value", "unknown-key"],
        but("0x300", "0").replace("a:i32", "a").replace("summary ", "sumary "),
    ),
]

MEANINGS = [
    meaning("half a meaning", "bad-syntax", "d = a +"),
    meaning("an unknown name", "unknown-name", "d = a + c"),
    meaning("an import", "unknown-function", "d = __import__('os').system('true')"),
    meaning("an attribute", "not-in-language", "d = a.__class__"),
    meaning("a lambda", "unknown-function", "d = (lambda: a)()"),
    meaning("a comprehension", "not-in-language", "d = [a for x in b]"),
    meaning("a loop", "bad-statement", "while a: d = b"),
    meaning("no result", "not-used", "x = a + b"),
    meaning("an operand unused", "not-used", "d = a + 1 if a < 3 else 4"),
    meaning("a result that may not fit", "may-not-fit", "d = a + b", remedy="wrap"),
    meaning("a division by what may be zero", "may-divide-by-zero", "d = wrap(a // b)"),
    meaning("a negative shift", "bad-shift", "d = wrap(a << b)"),
    meaning("a number of a million digits", "not-in-language", "d = wrap(a + b + 9 ** 9 ** 9)"),
    meaning("a product too wide", "too-big", "d = wrap(a * b * a * b * a)"),
    meaning("a long iteration", "bad-arguments", "d = iterate(1000000000, a, wrap(a + b))"),
    meaning("an iteration of an operand", "bad-arguments", "d = iterate(b, a, wrap(a + 1))"),
    meaning("nested deeper than Python reads", "bad-syntax", f"d = {'(' * 500}a{')' * 500} + b"),
    meaning("nested deep", "too-deep", f"d = {'~' * 900}(a ^ b)"),
    meaning("long", "too-long", "d = wrap(a + b" + " + a" * 20_000 + ")"),
    meaning("lanes of a word", "no-such-lane", "d = a[0] + wrap(b)"),
    meaning("a lane too far", "no-such-lane", "d = a[2] + b", "d:i32, a:i16x2, b:i16"),
    meaning("two addresses", "bad-operand", "d = wrap(mem[a, i32] + mem[b, i32])", "d:i32, a:address, b:address"),
    meaning("two accesses", "bad-access", "d = wrap(mem[a, i32] + mem[a, i16])", "d:i32, a:address"),
    meaning("memory without an address", "bad-access", "d = mem[a, i32] + wrap(b)"),
    meaning("a result twice", "assigned-twice", "d = a; d = b"),
    meaning("a string", "not-in-language", "d = wrap(a + b) if 'x' else 3"),
]

ROWS = [*FILES, *KEYS, *MEANINGS]
