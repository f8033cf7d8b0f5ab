"""Seeded mutations of texts, bytes, arrays and images."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from random import Random

from tests.robustness.rows_images import MAGIC, parts, sealed

TOKEN = re.compile(r'"[^"\n]*"|[A-Za-z_]\w*|\d\w*|\s+|[^\w\s]')
STRING = re.compile(r'"([^"\n]*)"')
NUMBER = re.compile(r"(?<![\w.])-?\d[\w.]*")

NUMBERS = (
    *("0", "-1", "1", "2", "3", "7", "255", "256", "65535", "65536", "2147483647", "2147483648", "-2147483649"),
    *("4294967296", "9" * 19, "9" * 30, "9" * 5000, "0x", "0xFFFFFFFF", "0b102", "1e9", "1e999", "1.5", "-0.0", "nan"),
    *("inf", "1_000", "007", "1979-05-27", "3j", "1 // 0", "2 ** 255", "9 ** 99", "1 << 300", "-5 % 3"),
)
CHARACTERS = (
    *("\0", "\t", "\r", "\n", "\x0b", "\x0c", "\x1b", "\x1c", "\x7f", "\x85", "\xa0", "\xad", "é", "ß", "İ", "²", "٣"),
    *("\u200b", "\u202e", "\u2028", "\u2029", "\ufeff", "\ufffd", "\uffff", "😀", "𝟙", "ａ", "a\u0301"),
    *("'", '"', '"""', "'''", "\\", "#", ";", ":", "@", "[", "]", "[[", "]]", "(", ")", "{", "}", ",", ".", "=", "*"),
)
TOML = (
    *("[x]\n", "[[x]]\n", "[latency]\n", "[slot.g.x]\n", "[memory.wait.x]\n", "x = 1\n", "x.y.z = 1\n", '"" = 1\n'),
    *(
        "x = [[[[[[[[[[]]]]]]]]]]\n",
        "x = {a = {b = {c = 1}}}\n",
        'x = """\n',
        "x = 1979-05-27T07:32:00Z\n",
        "x = +inf\n",
    ),
    *('base = "pair7"\n', "remove = []\n", "operations = []\n", 'name = ""\n', 'x = "\\u0000"\n', 'x = "\\ud800"\n'),
)


Way = Callable[[str, Random, list[str]], str]


def text(original: str, random: Random, others: list[str], gentle: tuple[Way, ...] | None = None) -> str:
    """``original`` with a few mutations, ``gentle`` ones most often; tokens and lines may come from ``others``."""
    ways = (gentle or GENTLE) if random.random() < 0.7 else ROUGH
    for _ in range(random.choice((1, 1, 1, 1, 2, 2, 3, 6))):
        original = random.choice(ways)(original, random, others)
    return original


def _tokens(t: str, random: Random, others: list[str]) -> str:
    """Some tokens replaced by others, of this file or another."""
    tokens = TOKEN.findall(t) or [""]
    at = random.randrange(len(tokens))
    pool = tokens if random.random() < 0.5 else TOKEN.findall(_window(random.choice(others), random)) or tokens
    new = [random.choice(pool) for _ in range(random.choice((0, 1, 1, 1, 2)))]
    return "".join([*tokens[:at], *new, *tokens[at + random.choice((0, 1, 1, 1, 3)) :]])


def _like(t: str, random: Random, others: list[str]) -> str:
    """A word, number, text or sign becomes another of its kind: what is no more a mistake of form."""
    tokens = TOKEN.findall(t)
    solid = [k for k, token in enumerate(tokens) if not token.isspace()]
    if solid:
        at = random.choice(solid)
        pool = tokens if random.random() < 0.8 else TOKEN.findall(_window(random.choice(others), random))
        same = [token for token in pool if _kind(token) == _kind(tokens[at]) and token != tokens[at]]
        tokens[at] = random.choice(same or tokens)
    return "".join(tokens)


def _nearby(t: str, random: Random, others: list[str]) -> str:
    """A number becomes a little more or less: another beat, register, offset or size."""
    found = list(re.finditer(r"\d{1,6}(?![\w.])", t))
    if not found:
        return t
    match = random.choice(found)
    value = max(0, random.choice((-2, -1, -1, 1, 1, 2, 4)) + int(match[0]))
    return f"{t[: match.start()]}{value}{t[match.end() :]}"


def _inside(t: str, random: Random, others: list[str]) -> str:
    """What stands between two quotes is mutated, and stays there."""
    found = list(STRING.finditer(t))
    if not found:
        return _like(t, random, others)
    match = random.choice(found)
    inner = random.choice((_like, _like, _swap, _number, _tokens, _deep))(match[1], random, [random.choice(found)[1]])
    return t[: match.start(1)] + inner.replace('"', "").replace("\n", " ") + t[match.end(1) :]


def _value(t: str, random: Random, others: list[str]) -> str:
    """A number becomes another that TOML takes."""
    found = list(NUMBER.finditer(t))
    if not found:
        return _like(t, random, others)
    match = random.choice(found)
    plain = [n for n in NUMBERS if re.fullmatch(r"-?[1-9]\d{0,40}|0|0x[0-9A-F]+|-?\d\.\d", n)]
    return t[: match.start()] + random.choice([random.choice(found)[0], *plain]) + t[match.end() :]


def _whole_line(t: str, random: Random, others: list[str]) -> str:
    """A line is dropped, or its value becomes that of another line."""
    lines = t.split("\n")
    at, to = random.randrange(len(lines)), random.randrange(len(lines))
    if "=" in lines[at] and "=" in lines[to] and random.random() < 0.7:
        lines[at] = lines[at].partition("=")[0] + "=" + lines[to].partition("=")[2]
    else:
        del lines[at]
    return "\n".join(lines)


def _kind(token: str) -> str:
    if token[0].isalpha():  # registers, keywords and names are different words
        return "register" if re.fullmatch(r"[gh]\d+", token) else "word"
    return "number" if token[0].isdigit() else token[0] if token[0] in '"\n[](){}' else "sign"


def _swap(t: str, random: Random, others: list[str]) -> str:
    """Two tokens change places."""
    tokens = TOKEN.findall(t)
    words = [k for k, token in enumerate(tokens) if not token.isspace()]
    if len(words) > 1:
        a, b = random.sample(words, 2)
        tokens[a], tokens[b] = tokens[b], tokens[a]
    return "".join(tokens)


def _lines(t: str, random: Random, others: list[str]) -> str:
    """Lines doubled, dropped, moved, or taken from elsewhere."""
    lines = t.split("\n")
    at, to = random.randrange(len(lines)), random.randrange(len(lines))
    kind = random.randrange(5)
    if kind == 0:
        lines[at:at] = lines[to : to + random.choice((1, 1, 3))] * random.choice((1, 1, 2, 50))
    elif kind == 1:
        del lines[at : at + random.choice((1, 1, 2, 5))]
    elif kind == 2:
        lines[at], lines[to] = lines[to], lines[at]
    elif kind == 3:
        lines[at:at] = random.sample(other := random.choice(others).split("\n"), min(len(other), random.randint(1, 3)))
    else:
        lines[at] = "".join(random.sample(words := TOKEN.findall(lines[at]), len(words)))
    return "\n".join(lines)


def _number(t: str, random: Random, others: list[str]) -> str:
    """A number becomes another, or a huge one, or none."""
    found = list(NUMBER.finditer(t))
    if not found:
        return t + random.choice(NUMBERS)
    match = random.choice(found)
    return t[: match.start()] + random.choice(NUMBERS) + t[match.end() :]


def _character(t: str, random: Random, others: list[str]) -> str:
    """A character more, or another."""
    at = random.randrange(len(t) + 1)
    return t[:at] + random.choice(CHARACTERS) * random.choice((1, 1, 1, 2, 300)) + t[at + random.choice((0, 1)) :]


def _cut(t: str, random: Random, others: list[str]) -> str:
    """The end, the beginning or a stretch of the middle is missing, or comes again."""
    a, b = sorted((random.randrange(len(t) + 1), random.randrange(len(t) + 1)))
    return random.choice((t[:a], t[b:], t[:a] + t[b:], t[:b] + t[a:] if b - a < 4000 else t[:a]))


def _toml(t: str, random: Random, others: list[str]) -> str:
    """A line of TOML where it does not belong."""
    at = random.choice([0, *(m.end() for m in re.finditer("\n", t))])
    return t[:at] + random.choice(TOML) + t[at:]


def _deep(t: str, random: Random, others: list[str]) -> str:
    """Brackets around something, many times."""
    at = random.randrange(len(t) + 1)
    left, right = random.choice(("()", "[]", "{}", "''", ("-", ""), ("~", ""), ("not ", ""), ("1+", "")))
    count = random.choice((1, 5, 70, 3000))
    end = min(len(t), at + random.randrange(1, 9))
    return t[:at] + left * count + t[at:end] + right * count + t[end:]


def _window(t: str, random: Random) -> str:
    at = random.randrange(len(t) + 1)
    return t[at : at + 400]


GENTLE = (_like, _like, _nearby, _nearby, _nearby, _swap, _number, _lines)
GENTLE_TOML = (_like, _inside, _inside, _value, _value, _whole_line)
ROUGH = (_tokens, _tokens, _tokens, _swap, _lines, _lines, _number, _character, _character, _cut, _toml, _deep)


def data(original: bytes, random: Random, others: list[bytes]) -> bytes:
    """Bytes flipped, dropped, doubled, blown up, or from elsewhere."""
    for _ in range(random.choice((1, 1, 2, 4))):
        at = random.randrange(len(original) + 1)
        to = min(len(original), at + random.choice((1, 1, 2, 8, 64)))
        piece = original[at:to]
        kind = random.randrange(6)
        if kind == 0 and piece:
            piece = bytes([piece[0] ^ 1 << random.randrange(8)]) + piece[1:]
        elif kind == 1:
            piece = b""
        elif kind == 2:
            piece *= random.choice((2, 3, 500))
        elif kind == 3:
            piece = random.choice((b"\0", b"\xff")) * len(piece)
        elif kind == 4:
            other = random.choice(others)
            start = random.randrange(len(other) + 1)
            piece = other[start : start + random.choice((1, 8, 64))]
        else:
            to = len(original)
        original = original[:at] + piece + original[to:]
    return original


def image(original: bytes, random: Random, others: list[bytes]) -> bytes:
    """An image with other words or another header, most often with a checksum that is right again."""
    if random.random() < 0.15:
        return data(original, random, others)
    header, code = parts(original)
    if random.random() < 0.35:
        line = _header(header, random)
    else:
        code = _words(code, int(str(header["bits"])) // 8, random, others)
        if random.random() < 0.9:
            header["words"] = len(code) * 8 // int(str(header["bits"]))
        if random.random() < 0.9:
            header["digest"] = ""
        line = json.dumps(header, sort_keys=True, separators=(",", ":"))
    body = MAGIC + line.encode("utf-8", "surrogatepass") + b"\n" + code
    return sealed(body if random.random() < 0.97 else body[: random.randrange(len(body))])


def _header(header: dict[str, object], random: Random) -> str:
    """A header with a value that it should not have, or a text that is no header."""
    key = random.choice([*header, "more"])
    strange: list[object] = [
        0,
        -1,
        7,
        64,
        1 << 40,
        10**30,
        1.5,
        None,
        True,
        "",
        "lone4",
        "pair7",
        "../x",
        "x.toml",
        [],
        {},
    ]
    strange += [
        {"start": -1},
        {"start": 1 << 40},
        {"a b": 0},
        {"start": "0"},
        {"é": 8},
        {"start": 8, "again": 8},
        "0" * 64,
    ]
    if random.random() < 0.2:
        header.pop(key, None)
    else:
        header[key] = random.choice(strange)
    line = json.dumps(header, sort_keys=True, separators=(",", ":"))
    return text(line, random, [line]).replace("\n", " ") if random.random() < 0.3 else line


def _words(code: bytes, size: int, random: Random, others: list[bytes]) -> bytes:
    """Other words: bits flipped, fields from elsewhere, words moved, dropped, doubled."""
    words = [code[k : k + size] for k in range(0, len(code), size)]
    for _ in range(random.choice((1, 1, 2, 5))):
        at, to = (random.randrange(len(words)) for _ in range(2)) if words else (0, 0)
        kind = random.randrange(6)
        if not words or kind == 0:
            words.insert(at, random.randbytes(size))
        elif kind in (1, 2):
            value = int.from_bytes(words[at], "little") ^ 1 << random.randrange(8 * size)
            words[at] = value.to_bytes(size, "little")
        elif kind == 3:
            words[at], words[to] = words[to], words[at]
        elif kind == 4:
            words[at:at] = words[to : to + 2] * random.choice((1, 1, 30))
        else:
            del words[at]
    return b"".join(words)


def array(original: bytes, random: Random, others: list[bytes]) -> bytes:
    """An array file with a damaged header, of the right length most often, or with damaged data."""
    if random.random() < 0.4:
        return data(original, random, others)
    size = int.from_bytes(original[8:10], "little")
    header, rest = original[10 : 10 + size].decode("latin-1"), original[10 + size :]
    header = text(header, random, [header, "{'descr': '|O', 'shape': (2, 3), 'fortran_order': True}"])
    encoded = header.encode("latin-1", "replace") + b"\n"
    length = len(encoded) if random.random() < 0.8 else random.randrange(1 << 16)
    return original[:8] + (length & 0xFFFF).to_bytes(2, "little") + encoded + rest
