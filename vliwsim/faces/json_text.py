"""JSON as the commands print it."""

from __future__ import annotations


def json_text(data: object) -> str:
    """``data`` as indented JSON; characters that a terminal might obey are escaped.

    Raises ValueError for numbers that JSON does not have.
    """
    import json

    text = json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False)
    return text if text.replace("\n", "").isprintable() else "".join(map(_escaped, text))


def _escaped(character: str) -> str:
    if character.isprintable() or character == "\n":
        return character
    units = character.encode("utf-16-be", "surrogatepass").hex()
    return "".join([f"\\u{units[k : k + 4]}" for k in range(0, len(units), 4)])
