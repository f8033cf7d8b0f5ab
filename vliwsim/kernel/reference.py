"""The reference of a kernel: ``reference.py`` beside its source, a function of the kernel's name.

Loading it executes it: it is the one file of a kernel that is code, not data, so only commands that compare load it.
The function gets copies of the given arrays, scalars and sizes by the names of its parameters, and returns the outputs
as a dict by name, as a tuple in interface order, or, where there is one, as the value itself.
"""

from __future__ import annotations

import contextlib
import inspect
import sys
import types
from collections.abc import Callable, Iterator, Mapping
from functools import cached_property
from pathlib import Path
from typing import Any

import attrs
import numpy as np

from vliwsim.description.files import open_regular
from vliwsim.kernel.binding import Setup
from vliwsim.kernel.elements import Element, convert
from vliwsim.kernel.interface import interface_of
from vliwsim.kernel.outputs import Output
from vliwsim.problems import Place, Problem, ReferenceFailure, problem
from vliwsim.program.kernel import Kernel


@attrs.frozen(eq=False)
class Reference:
    """A loaded reference. ``cases``: the file's own ``cases`` function, if it has one."""

    path: Path
    function: Callable[..., Any]
    cases: Callable[..., Any] | None
    source: str

    @cached_property
    def parameters(self) -> tuple[inspect.Parameter, ...]:
        """What the function takes."""
        return tuple(inspect.signature(self.function).parameters.values())


def reference_path(kernel: Kernel) -> Path:
    return Path(kernel.path).parent / "reference.py"


def load_reference(kernel: Kernel) -> Reference | None:
    """The reference of ``kernel``; None if there is no ``reference.py`` beside it.

    Executes the file. Raises :class:`~vliwsim.problems.ReferenceFailure` if it cannot be read or fails, or has no
    function of the kernel's name.
    """
    path = reference_path(kernel)
    try:
        with open_regular(path) as stream:
            source = stream.read().decode("utf-8-sig")
    except FileNotFoundError:
        return None
    except (OSError, UnicodeDecodeError) as error:
        said = getattr(error, "strerror", None) or str(error)
        raise ReferenceFailure(problem("reference-file", f"{path}: {said}", "a Python file in UTF-8")) from None
    module = types.ModuleType("vliwsim_reference")
    module.__file__ = str(path)
    with judged_code(path, source, "loading it"), _importable(path.parent, module):
        exec(compile(source, str(path), "exec"), module.__dict__)
    function = getattr(module, kernel.name, None)
    if not callable(function):
        there = [n for n, v in vars(module).items() if inspect.isfunction(v) and v.__module__ == module.__name__]
        found = f"{path} has no function {kernel.name}" + (f", only {', '.join(there)}" if there else "")
        raise ReferenceFailure(problem("reference-function", found, f"def {kernel.name}(…)", place=Place(str(path))))
    cases = getattr(module, "cases", None)
    return Reference(path, function, cases if callable(cases) else None, source)


@contextlib.contextmanager
def _importable(folder: Path, module: types.ModuleType) -> Iterator[None]:
    """Modules beside the reference can be imported while it loads, and leave no compiled files behind."""
    entry, wrote = str(folder.resolve()), sys.dont_write_bytecode
    before = sys.modules.get(module.__name__)
    sys.path.insert(0, entry)
    sys.modules[module.__name__] = module
    sys.dont_write_bytecode = True
    try:
        yield
    finally:
        sys.dont_write_bytecode = wrote
        if entry in sys.path:
            sys.path.remove(entry)
        if before is not None:
            sys.modules[module.__name__] = before


@contextlib.contextmanager
def judged_code(path: Path, source: str, doing: str) -> Iterator[None]:
    """Whatever the reference raises becomes a ReferenceFailure at the line of the file that raised it."""
    try:
        yield
    except (ReferenceFailure, KeyboardInterrupt):
        raise
    except BaseException as error:
        raise ReferenceFailure(_raised(path, source, doing, error)) from None


def _raised(path: Path, source: str, doing: str, error: BaseException) -> Problem:
    if isinstance(error, SyntaxError) and error.filename == str(path):
        place = Place(str(path), error.lineno or 1, error.offset or 1)
    else:
        import traceback

        frames = traceback.extract_tb(error.__traceback__)
        lines = [frame.lineno or 1 for frame in frames if frame.filename == str(path)]
        place = Place(str(path), lines[-1] if lines else 1)
    text = source.splitlines()
    line = text[place.line - 1] if 0 < place.line <= len(text) else ""
    place = place._replace(column=max(place.column, len(line) - len(line.lstrip()) + 1))
    said = str(error).splitlines()
    found = f"{type(error).__name__} while {doing}" + (f": {said[0]}" if said else "")
    return problem("reference-raised", found, "a reference that returns the outputs", place=place, excerpt=line)


def call_reference(reference: Reference, setup: Setup) -> dict[str, Output]:
    """The outputs that the reference expects, in each output's NumPy type.

    Raises :class:`~vliwsim.problems.ReferenceFailure` when it raises or returns something else than the outputs.
    """
    arguments = _arguments(reference, setup)
    with judged_code(reference.path, reference.source, f"calling {setup.kernel.name}"):
        result = reference.function(**arguments)
        if inspect.isgenerator(result):
            result = tuple(result)
    return _outputs(reference, setup, result)


def _arguments(reference: Reference, setup: Setup) -> dict[str, Any]:
    """Only the parameters that the function names; with ``**`` everything given."""
    interface = interface_of(setup.kernel)
    given: dict[str, Any] = {name: array.copy() for name, array in setup.arrays.items()}
    given |= {name: setup.values[name] for name in interface.inputs if name in setup.values}
    given |= setup.sizes
    known = {**setup.kernel.constants, **setup.values, **given}
    parameters = reference.parameters
    named = [p for p in parameters if p.kind in (p.POSITIONAL_OR_KEYWORD, p.KEYWORD_ONLY)]
    wrong = [p.name for p in parameters if p.kind is p.POSITIONAL_ONLY]
    wrong += [p.name for p in named if p.name not in known and p.default is p.empty]
    if wrong:
        found = f"{setup.kernel.name} asks for {', '.join(wrong)}"
        allowed = f"parameters by name among {', '.join(sorted(known)) or 'none'}"
        raise ReferenceFailure(problem("reference-parameter", found, allowed, place=_definition(reference)))
    arguments = {p.name: known[p.name] for p in named if p.name in known}
    if any(p.kind is p.VAR_KEYWORD for p in parameters):
        arguments = {**given, **arguments}
    return arguments


def _definition(reference: Reference) -> Place:
    code = getattr(reference.function, "__code__", None)
    return Place(str(reference.path), code.co_firstlineno if code else 1)


def _outputs(reference: Reference, setup: Setup, result: Any) -> dict[str, Output]:
    interface = interface_of(setup.kernel)
    names = list(interface.outputs)
    place = _definition(reference)
    if isinstance(result, Mapping):
        wrong = [f"no {n}" for n in names if n not in result] + [
            f"{n}, which is no output" for n in result if n not in names
        ]
        if wrong:
            raise _returned(
                f"the reference returns {', '.join(map(str, wrong))}", f"a dict of {', '.join(names)}", place
            )
        values = dict(result)
    elif len(names) == 1 and not (isinstance(result, tuple) and len(result) == 1):
        values = {names[0]: result}
    elif isinstance(result, (tuple, list)) and len(result) == len(names):
        values = dict(zip(names, result))
    else:
        what = f"{len(result)} values" if isinstance(result, (tuple, list)) else type(result).__name__
        raise _returned(f"the reference returns {what}", f"{len(names)} outputs: {', '.join(names) or 'none'}", place)
    problems: list[Problem] = []
    outputs = {
        name: _output(setup, name, value, interface.element(name), problems, place) for name, value in values.items()
    }
    if problems:
        raise ReferenceFailure(problems)
    return {name: outputs[name] for name in names}


def _returned(found: str, allowed: str, place: Place) -> ReferenceFailure:
    return ReferenceFailure(problem("reference-returned", found, allowed, place=place))


def _output(setup: Setup, name: str, value: Any, element: Element, problems: list[Problem], place: Place) -> Output:
    """One expected output in the element's type; mistakes go to ``problems``."""
    if value is None:
        problems.append(problem("reference-returned", f"None for {name}", "numbers", "a return statement", place=place))
        return 0
    converted = convert(element, value, name)
    problems += [
        attrs.evolve(p, name="reference-returned", found=f"the reference's {p.found}", place=place)
        for p in converted.problems
    ]
    array = converted.array
    if array is None:
        return 0
    wanted = () if interface_of(setup.kernel).items[name].size is None else (setup.area(name).bytes // element.bytes,)
    if array.shape != wanted and not (wanted == () and array.shape == (1,)):
        found = f"the reference returns {name} of shape {array.shape}"
        problems.append(problem("reference-returned", found, f"shape {wanted}", place=place))
        return 0
    if wanted:
        return np.asarray(array)
    single = array.reshape(())
    return np.float32(single[()]) if element.floating else int(single)
