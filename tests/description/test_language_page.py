"""The page that describes the language: the tables it shows load, and it names every function and rounding mode."""

from __future__ import annotations

import re
from pathlib import Path

from vliwsim.description.language.expressions import ALL_FUNCTIONS, FLOAT_MODES, MODES
from vliwsim.description.places import isa_folder
from vliwsim.description.tables import load_operations

PAGES = [
    text for page in sorted(isa_folder().glob("*.md")) if "[damp.h2]" in (text := page.read_text(encoding="utf-8"))
]


def test_the_tables_shown_are_accepted(tmp_path: Path) -> None:
    (page,) = PAGES
    blocks = re.findall(r"(?:^(?:    .*)?\n)+", page, re.MULTILINE)
    shown = [re.sub(r"^    ", "", block, flags=re.MULTILINE) for block in blocks if "    operands" in block]
    path = tmp_path / "page.toml"
    path.write_text("\n".join(shown), encoding="utf-8")
    assert {"damp.h2", "crc32.byte"} <= set(load_operations([str(path)]).by_name)


def test_every_function_and_mode_is_described() -> None:
    (page,) = PAGES
    assert {*ALL_FUNCTIONS, *MODES, *FLOAT_MODES} <= set(re.findall(r"\w+", page))
