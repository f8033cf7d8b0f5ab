"""The shape of the repository: rooms that know nothing of higher ones, and documents that name only what is there.

Each "X never imports Y" of DEVELOPERS.md is held here, on every import of every module, inside functions too.
"""

from __future__ import annotations

import ast
import re
import subprocess
import sys
from collections.abc import Iterator
from importlib import import_module
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGE = ROOT / "vliwsim"

LEVELS = [
    ("problems",),
    ("description",),
    ("program",),
    ("machine", "flow"),
    ("native", "check", "bounds"),
    ("kernel",),
    ("regression", "shell"),
    ("faces",),
]
"""Section 9 of the design: a room may import rooms of its own level and below. Problems are everybody's."""

RUNS_CODE = {
    "vliwsim.description.language.compile_python",  # functions made from checked meanings
    "vliwsim.machine.rows",  # functions made from decoded bundles
    "vliwsim.kernel.reference",  # the user's reference.py, which is code
}

TOP = {
    "README.md",
    "DEVELOPERS.md",
    "pyproject.toml",
    ".ci",
    ".gitignore",
    "vliwsim",
    "isa",
    "programs",
    "tests",
    "tools",
}


def level_of(module: str) -> int:
    """The level of a module's room; that of the package itself, which offers all, is above every room."""
    parts = module.split(".")
    if len(parts) == 1 or parts[1] in ("__main__", "__init__"):
        return len(LEVELS)
    (level,) = (k for k, rooms in enumerate(LEVELS) if parts[1] in rooms)
    return level


def name_of(path: Path) -> str:
    return ".".join(path.relative_to(ROOT).with_suffix("").parts).removesuffix(".__init__")


MODULES = {name_of(path): path for path in sorted(PACKAGE.rglob("*.py"))}
TREES = {name: ast.parse(path.read_text(encoding="utf-8")) for name, path in MODULES.items()}


def imports(module: str, nodes: Iterator[ast.AST] | list[ast.AST]) -> Iterator[str]:
    """Full names of what these statements import; of ``from x import y`` ``x.y`` where that is a module, else ``x``."""
    package = module if MODULES[module].name == "__init__.py" else module.rpartition(".")[0]
    for node in nodes:
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            above = package.split(".")[: len(package.split(".")) - node.level + 1] if node.level else []
            base = ".".join([*above, *([node.module] if node.module else [])])
            yield from (whole if (whole := f"{base}.{alias.name}") in MODULES else base for alias in node.names)


def at_import(tree: ast.AST) -> Iterator[ast.AST]:
    """The nodes that run when a module is imported: not in functions, not for the type checker."""
    for node in ast.iter_child_nodes(tree):
        if isinstance(node, ast.FunctionDef | ast.AsyncFunctionDef | ast.Lambda):
            continue
        if isinstance(node, ast.If) and ast.unparse(node.test) in ("TYPE_CHECKING", "typing.TYPE_CHECKING"):
            continue
        yield node
        yield from at_import(node)


def called(tree: ast.AST) -> set[str]:
    """Names of what is called by a plain name: ``print(…)``."""
    return {node.func.id for node in ast.walk(tree) if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)}


def room_modules(*rooms: str) -> list[str]:
    return [name for name in MODULES if name.split(".")[1:2] and name.split(".")[1] in rooms]


def test_every_room_has_a_level() -> None:
    assert {name.split(".")[1] for name in MODULES if "." in name} <= {*sum(LEVELS, ()), "__main__"}
    for room in ("description", "program", "machine", "kernel", "faces"):
        assert room_modules(room), room


@pytest.mark.parametrize("module", MODULES)
def test_no_lower_room_knows_a_higher_one(module: str) -> None:
    known = {name for name in imports(module, list(ast.walk(TREES[module]))) if name.split(".")[0] == "vliwsim"}
    higher = sorted(name for name in known if level_of(name) > level_of(module))
    if module.startswith("vliwsim.faces"):
        higher = [name for name in higher if name != "vliwsim"]  # the top of the package: its version and public names
    assert not higher


def test_the_check_itself_sees_a_wrong_import() -> None:
    tree = ast.parse(
        "def f():\n    from vliwsim.faces import main\n    from ..kernel import runner\n    import vliwsim"
    )
    known = list(imports("vliwsim.machine.stepper", list(ast.walk(tree))))
    assert known == ["vliwsim.faces.main", "vliwsim.kernel.runner", "vliwsim"]
    assert all(level_of(name) > level_of("vliwsim.machine.stepper") for name in known)


@pytest.mark.parametrize("module", MODULES)
def test_what_takes_long_to_import_is_imported_when_it_is_used(module: str) -> None:
    loaded = {name.split(".")[0] for name in imports(module, list(at_import(TREES[module])))}
    if module == "vliwsim.faces.pytest_plugin":  # which only pytest imports
        loaded.discard("pytest")
    assert not loaded & {
        "networkx",
        "rich",
        "prompt_toolkit",
        "scipy",
        "hypothesis",
        "pytest",
        "matplotlib",
        "llvmlite",
    }
    if level_of(module) <= level_of("vliwsim.program"):
        assert "numpy" not in loaded


@pytest.mark.parametrize("module", room_modules(*(room for rooms in LEVELS[:-1] for room in rooms)))
def test_only_faces_print(module: str) -> None:
    assert "print" not in called(TREES[module])
    known = set(imports(module, list(ast.walk(TREES[module]))))
    assert not {name.split(".")[0] for name in known} & {"click", "rich", "argparse", "getpass", "readline"}
    for node in ast.walk(TREES[module]):
        if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.value.id == "sys":
            assert node.attr not in ("stdout", "stdin", "exit")
            # what a user's reference.py prints goes to the standard error, so that --json stays one object
            assert node.attr != "stderr" or module == "vliwsim.kernel.runner"


@pytest.mark.parametrize("module", MODULES)
def test_files_from_strangers_are_data(module: str) -> None:
    """No eval or pickle anywhere; exec only of the program's own generated code and of reference.py."""
    tree = TREES[module]
    assert not called(tree) & {"eval", "__import__"}
    known = {name.split(".")[0] for name in imports(module, list(ast.walk(tree)))}
    assert not known & {"pickle", "marshal", "shelve", "dill", "yaml"}
    if "exec" in called(tree):
        assert module in RUNS_CODE
    for node in ast.walk(tree):
        if isinstance(node, ast.keyword) and node.arg == "allow_pickle":
            assert isinstance(node.value, ast.Constant)
            assert node.value.value is False


def test_modules_do_not_import_each_other_in_a_circle() -> None:
    """At import time; within functions a room may look back at itself."""
    from networkx import DiGraph, find_cycle
    from networkx.exception import NetworkXNoCycle

    graph: DiGraph[str] = DiGraph()
    for module, tree in TREES.items():
        graph.add_edges_from((module, name) for name in imports(module, list(at_import(tree))) if name in MODULES)
    graph.remove_edges_from([(name, name) for name in MODULES])
    with pytest.raises(NetworkXNoCycle):
        find_cycle(graph)


def loaded_by(statement: str) -> set[str]:
    """Top-level names of the modules a fresh Python has loaded after ``statement``."""
    program = f"{statement}\nimport sys; print(*sys.modules)"
    run = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=True, cwd=ROOT)
    return {name.split(".")[0] for name in run.stdout.splitlines()[-1].split()}


def test_a_cold_start_loads_little() -> None:
    heavy = {"numpy", "networkx", "rich", "scipy", "hypothesis", "pytest"}
    assert not loaded_by("import vliwsim") & heavy
    assert not loaded_by("import vliwsim.faces.main") & heavy
    assert not loaded_by("from vliwsim.description.corefile import load_core; load_core('ring16')") & heavy


# The repository and its documents

DOCUMENTS = [
    *sorted(ROOT.glob("*.md")),
    *sorted((ROOT / "isa").glob("*.md")),
    *sorted((ROOT / "programs").glob("*.md")),
]


def test_nothing_else_stands_at_the_top() -> None:
    listing = subprocess.run(["git", "ls-files"], capture_output=True, text=True, check=False, cwd=ROOT)
    if listing.returncode:
        pytest.skip("not a git checkout")
    assert {line.split("/")[0] for line in listing.stdout.splitlines()} <= TOP


def quoted(document: Path) -> list[str]:
    """What a document puts in backquotes."""
    return re.findall(r"`([^`\n]+)`", document.read_text(encoding="utf-8"))


@pytest.mark.parametrize("document", DOCUMENTS, ids=lambda path: str(path.relative_to(ROOT)))
def test_paths_and_modules_that_a_document_names_exist(document: Path) -> None:
    strange = []
    for words in quoted(document):
        for word in words.split():
            name = word.rstrip(".,;:()")
            if re.match(r"(vliwsim|isa|programs|tests|tools|\.ci)/[\w./*-]*$", name):
                there = list(ROOT.glob(name)) if "*" in name else (ROOT / name).exists()
                strange += [] if there else [name]
            elif re.fullmatch(r"vliwsim(\.\w+)+", name):
                strange += [] if resolves(name) else [name]
            elif document.name == "DEVELOPERS.md" and re.fullmatch(r"[\w/]+\.py", name):
                strange += [] if any(str(path).endswith("/" + name) for path in ROOT.rglob(Path(name).name)) else [name]
    assert not strange


@pytest.mark.parametrize("document", DOCUMENTS, ids=lambda path: str(path.relative_to(ROOT)))
def test_links_of_a_document_lead_somewhere(document: Path) -> None:
    text = document.read_text(encoding="utf-8")
    titles = [line.lstrip("# ").lower() for line in text.splitlines() if line.startswith("#")]
    headings = {re.sub(r"[^\w\- ]", "", title).strip().replace(" ", "-") for title in titles}
    for target in re.findall(r"\]\(([^)\s]+)\)", text):
        if target.startswith("#"):
            assert target[1:] in headings, target
        elif "://" not in target:
            assert (document.parent / target.split("#")[0]).exists(), target


def resolves(name: str) -> bool:
    """Is this dotted name a module, or something in one?"""
    parts = name.split(".")
    for k in range(len(parts), 0, -1):
        if ".".join(parts[:k]) in MODULES:
            found: object = import_module(".".join(parts[:k]))
            for part in parts[k:]:
                if not hasattr(found, part):
                    return False
                found = getattr(found, part)
            return True
    return False


def test_resolving_names() -> None:
    assert resolves("vliwsim.description.core.Core.evolve")
    assert not resolves("vliwsim.description.core.Core.revolve")
    assert not resolves("vliwsim.nothing.here")
