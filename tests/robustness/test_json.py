"""JSON for programs is also seen by terminals."""

from __future__ import annotations

import json

import pytest

from vliwsim.faces.json_text import json_text


@pytest.mark.parametrize(
    "text", ["plain × ü", "\x7f", "\x9b2J", "\u202e", "\uffff", "\U0010ffff", "\ud800", 'a\nb\t"\\']
)
def test_only_printable_characters_and_the_same_data(text: str) -> None:
    said = json_text({"a": [text, 1, None]})
    assert all(c.isprintable() or c == "\n" for c in said)
    assert json.loads(said) == {"a": [text, 1, None]}


def test_numbers_that_json_has_not() -> None:
    with pytest.raises(ValueError, match="not JSON compliant"):
        json_text(float("nan"))
