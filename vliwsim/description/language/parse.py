"""From the text of a meaning to its tree.

Python's own parser reads the text; every node of it is then looked up in a white list and turned into a node of ours.
Nothing of the text is ever run.
"""

from __future__ import annotations

import ast
import re
import struct
import warnings
from collections.abc import Mapping, Sequence

import attrs

from vliwsim.description.language.faults import Fault, Faults
from vliwsim.description.language.operands import name_fault
from vliwsim.description.language.tree import (
    TRUTH,
    Assign,
    Binary,
    Call,
    Choose,
    Compare,
    Fit,
    Input,
    Iterate,
    Local,
    Logic,
    Node,
    Number,
    Real,
    Unary,
    Variable,
)
from vliwsim.description.language.types import LONGEST, TYPES, ValueType, type_named
from vliwsim.description.operations import Access, Operand, Role

LONGEST_TEXT = 4000
DEEPEST = 80
MOST_NODES = 4000
MOST_ITERATIONS = 64
MOST_STEPS = 20_000

MODES = ("half_up", "half_even", "half_away", "floor", "ceiling", "truncate")
FLOAT_MODES = ("half_even", "half_away", "floor", "ceiling", "truncate")

FUNCTIONS: Mapping[str, tuple[int, str]] = {
    "abs": (1, "abs(x)"),
    "unsigned": (1, "unsigned(x)"),
    "signed": (1, "signed(x)"),
    "bits": (3, "bits(x, low, count)"),
    "clz": (1, "clz(x)"),
    "ctz": (1, "ctz(x)"),
    "popcount": (1, "popcount(x)"),
    "clmul": (2, "clmul(a, b)"),
    "tdiv": (2, "tdiv(a, b)"),
    "trem": (2, "trem(a, b)"),
    "sqrt": (1, "sqrt(x)"),
    "fma": (3, "fma(a, b, c)"),
    "fmin": (2, "fmin(a, b)"),
    "fmax": (2, "fmax(a, b)"),
    "int_to_float": (1, "int_to_float(x)"),
    "as_float": (1, "as_float(x)"),
    "classify": (1, "classify(x)"),
}
"""Functions whose arguments are all expressions: how many, and how a call looks.

Besides these: ``min max`` (two or more, or ``for k``), ``sum(x for k)``, ``concat`` (two or more), ``round(x, n,
MODE)``, ``float_to_int(x, type, MODE)``, ``iterate(n, name, step)``, ``wrap sat uwrap usat``, ``mem[address, type]``.
"""

ALL_FUNCTIONS = sorted(
    [*FUNCTIONS, "min", "max", "sum", "concat", "round", "float_to_int", "iterate", "wrap", "sat", "uwrap", "usat"]
)

_ARITHMETIC: Mapping[type, str] = {
    ast.Add: "+", ast.Sub: "-", ast.Mult: "*", ast.FloorDiv: "//", ast.Mod: "%", ast.Div: "/",
    ast.LShift: "<<", ast.RShift: ">>", ast.BitAnd: "&", ast.BitOr: "|", ast.BitXor: "^",
}  # fmt: skip
_UNARY: Mapping[type, str] = {ast.USub: "-", ast.Invert: "~", ast.Not: "not"}
_COMPARE: Mapping[type, str] = {
    ast.Eq: "==", ast.NotEq: "!=", ast.Lt: "<", ast.LtE: "<=", ast.Gt: ">", ast.GtE: ">=",
}  # fmt: skip
_FOR = re.compile(r"\bfor\s+k\b(?!\s+in\b)")
_IN = " in _"
_NAMED_LANES = {"re": 0, "im": 1}
_TRUTH_TYPE = ValueType("truth", 1, False)


@attrs.frozen
class Parsed:
    """The syntax of one meaning: roles settled, names resolved, types not yet checked."""

    operands: tuple[Operand, ...]
    statements: tuple[Assign, ...]
    access: Access | None
    halt: bool
    uses_link: bool


def parse(operands: Sequence[Operand], text: str) -> Parsed:
    """The tree of ``text``. Raises :class:`Faults` with every mistake found, at most one a statement."""
    try:
        statements = _statements(text)
        return _Parser(operands).run(statements)
    except Fault as fault:
        raise Faults([fault]) from None


class _Source:
    """The text as Python's parser gets it, and the way back to places in the text as written."""

    def __init__(self, text: str) -> None:
        if len(text) > LONGEST_TEXT:
            raise Fault("too-long", f"{len(text)} characters", f"at most {LONGEST_TEXT}")
        for number, line in enumerate(text.split("\n"), 1):
            for column, letter in enumerate(line, 1):
                if not (letter.isascii() and letter.isprintable() or letter == "\t"):
                    raise Fault("bad-character", f"character {letter!r}", "plain ASCII", line=number, column=column)
        self.shifts: list[int] = []
        self.inserted: list[list[int]] = []
        lines = []
        for line in text.split("\n"):
            stripped = line.lstrip()
            self.shifts.append(len(line) - len(stripped))
            self.inserted.append([found.end() for found in _FOR.finditer(stripped)])
            lines.append(_FOR.sub(lambda found: found.group() + _IN, stripped))
        self.text = "\n".join(lines)

    def place(self, line: int | None, column: int | None) -> tuple[int, int]:
        """Line and column from 1 in the written text, for a line from 1 and a column from 0 of the parser's text."""
        line = min(max(line or 1, 1), len(self.shifts))
        column = max(column or 0, 0)
        for position in self.inserted[line - 1]:
            if column > position:
                column = max(position, column - len(_IN))
        return line, column + self.shifts[line - 1] + 1


def _statements(text: str) -> list[ast.stmt]:
    source = _Source(text)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            module = ast.parse(source.text)
    except SyntaxError as error:
        line, column = source.place(error.lineno, (error.offset or 1) - 1)
        raise Fault("bad-syntax", f"text that is no expression ({error.msg})", "name = expression; …",
                    line=line, column=column) from None  # fmt: skip
    except (RecursionError, MemoryError, ValueError):
        raise Fault("too-deep", "a nesting too deep to read", f"at most {DEEPEST} levels") from None
    _bound(module)
    for node in ast.walk(module):
        if hasattr(node, "lineno"):
            node.lineno, node.col_offset = source.place(node.lineno, node.col_offset)
    if not module.body:
        raise Fault("nothing-said", "no meaning", "name = expression; …, or halt")
    return module.body


def _bound(module: ast.Module) -> None:
    """Refuses trees too deep or too big, without recursion."""
    level: list[ast.AST] = [module]
    nodes = 0
    for _ in range(2 * DEEPEST):
        nodes += len(level)
        if nodes > MOST_NODES:
            raise Fault("too-long", f"more than {MOST_NODES} parts", f"at most {MOST_NODES}")
        level = [child for node in level for child in ast.iter_child_nodes(node)]
        if not level:
            return
    raise Fault("too-deep", f"more than {2 * DEEPEST} levels", f"at most {2 * DEEPEST} levels")


@attrs.define
class _Target:
    """What an assignment writes: ``lanes`` is None for a whole value, or the lanes written."""

    name: str
    lanes: list[int] | None
    each: bool = False
    """``name[k] = …``: for all k."""


class _Parser:
    """One meaning being resolved. ``lane`` is the value of k where there is one."""

    def __init__(self, operands: Sequence[Operand]) -> None:
        self.operands = {operand.name: operand for operand in operands}
        self.types = {name: type_named(operand.type) for name, operand in self.operands.items()}
        self.variables: dict[tuple[str, int | None], Variable] = {}
        self.lane_counts: dict[str, int] = {}
        self.assigned: dict[str, set[int | None]] = {}
        self.identifiers: set[str] = set()
        self.read: set[str] = set()
        self.access: Access | None = None
        self.uses_link = False
        self.lane: int | None = None
        self.aim: ValueType | None = None
        self.nodes = 0
        self.steps = 1
        self.depth = 0

    def run(self, body: list[ast.stmt]) -> Parsed:
        assigns: list[Assign] = []
        faults: list[Fault] = []
        if len(body) == 1 and isinstance(body[0], ast.Expr) and _is_name(body[0].value, "halt"):
            if self.operands:
                raise Fault("bad-operand", "halt with operands", "none")
            return Parsed((), (), None, True, False)
        for statement in body:
            try:
                assigns.extend(self.statement(statement))
            except Fault as fault:
                faults.append(fault)
        if not faults:
            faults = self.whole()
        if faults:
            raise Faults(faults)
        return Parsed(self.settled(), tuple(assigns), self.access, False, self.uses_link)

    def whole(self) -> list[Fault]:
        """What only the whole meaning shows: lanes left out, operands not used, roles that do not fit."""
        faults: list[Fault] = []
        for name, operand in self.operands.items():
            done = self.assigned.get(name)
            kind = self.types[name]
            if done and None not in done and (missing := set(range(kind.lanes)) - done):
                faults.append(Fault("lanes-left-out", f"{name}[{min(missing)}] is not assigned", "every lane, once"))
            if operand.role in (Role.INOUT, Role.STICKY) and not done:
                faults.append(
                    Fault("not-assigned", f"{operand.role.value} {name} is not assigned", "an assignment to it")
                )
            if operand.role in (Role.SOURCE, Role.CONSTANT) and not done and name not in self.read:
                faults.append(
                    Fault("not-used", f"operand {name} is neither read nor assigned", "every operand is used")
                )
            if operand.role is Role.ADDRESS and self.access is None:
                faults.append(Fault("not-used", f"address {name} without an access", f"one mem[{name}, type]"))
            if operand.role is Role.TARGET and "taken" not in self.assigned:
                faults.append(Fault("not-assigned", "a target, but taken is not assigned", "taken = condition"))
        if not self.assigned:
            faults.append(Fault("nothing-said", "nothing is assigned", "at least one result"))
        return faults

    def settled(self) -> tuple[Operand, ...]:
        """The operands with their final roles: a plain one that is assigned is a RESULT."""
        return tuple(
            attrs.evolve(operand, role=Role.RESULT)
            if operand.role is Role.SOURCE and name in self.assigned
            else operand
            for name, operand in self.operands.items()
        )

    # Statements

    def statement(self, node: ast.stmt) -> list[Assign]:
        if not isinstance(node, ast.Assign) or len(node.targets) != 1:
            raise _fault(node, "bad-statement", f"{_said(node)}", "name = expression, or halt alone")
        place = node.targets[0]
        if isinstance(place, ast.Subscript) and _is_name(place.value, "mem"):
            return [self.store(place, node.value)]
        target = self.target(place, node.value)
        kind = self.output_type(target, place)
        assigns: list[Assign] = []
        for lane in [None] if target.lanes is None else target.lanes:
            self.lane = lane if target.each else None
            self.aim = kind
            value = self.expression(node.value)
            assigns.append(self.assign(target.name, lane, kind, value, place))
        self.lane = None
        for assign in assigns:
            self.variables[target.name, assign.lane] = assign.variable
        return assigns

    def target(self, place: ast.expr, value: ast.expr) -> _Target:
        if isinstance(place, ast.Name):
            return _Target(place.id, None)
        if isinstance(place, ast.Attribute) and isinstance(place.value, ast.Name) and place.attr in _NAMED_LANES:
            self.two_lanes(place.value.id, place)
            return _Target(place.value.id, [_NAMED_LANES[place.attr]])
        if isinstance(place, ast.Subscript) and isinstance(place.value, ast.Name):
            name = place.value.id
            if not _is_name(place.slice, "k"):
                return _Target(name, [self.index(place.slice)])
            count = self.types[name].lanes if name in self.types else self.lanes_in(value, place)
            return _Target(name, list(range(count)), each=True)
        raise _fault(
            place, "bad-statement", f"assignment to {_said(place)}", "a name, name[k], name.re, mem[address, type]"
        )

    def output_type(self, target: _Target, place: ast.expr) -> ValueType | None:
        """The type of an output, None for a local; refuses what cannot be assigned."""
        name = target.name
        operand = self.operands.get(name)
        if name == "taken":
            if not any(o.role is Role.TARGET for o in self.operands.values()):
                raise _fault(place, "bad-statement", "taken without a target operand", "an operand such as to:target")
            if target.lanes is not None or "taken" in self.assigned:
                raise _fault(place, "assigned-twice", "taken again", "one assignment to taken")
            return _TRUTH_TYPE
        if operand is None:
            if wrong := name_fault(name):
                raise _fault(place, "bad-name", wrong, "a name of small letters, digits and _, no word of the language")
            lanes = self.lane_counts.get(name)
            if target.each:
                assert target.lanes is not None
                self.lane_counts[name] = len(target.lanes)
            elif target.lanes:
                self.lane_counts[name] = max(lanes or 0, target.lanes[0] + 1)
            return None
        if operand.role in (Role.ADDRESS, Role.TARGET, Role.CONSTANT) or operand.half:
            raise _fault(
                place, "bad-statement", f"assignment to {operand.role.value} operand {name}", "a result operand"
            )
        if operand.role is Role.SOURCE and name in self.read:
            raise _fault(
                place, "bad-statement", f"{name} is read before it is assigned", f"{name}:inout {operand.type}"
            )
        kind = self.types[name]
        if target.lanes is not None and (not kind.packed or max(target.lanes) >= kind.lanes):
            raise _fault(place, "no-such-lane", _said(place), f"{name} has {kind.lanes} lane{'s' * kind.packed}")
        done = self.assigned.setdefault(name, set())
        new: set[int | None] = {None} if target.lanes is None else set(target.lanes)
        if done & new or (done and None in done | new):
            raise _fault(
                place, "assigned-twice", f"{_said(place)} again", "every result once; use a local name between"
            )
        return kind

    def assign(self, name: str, lane: int | None, kind: ValueType | None, value: Node, place: ast.expr) -> Assign:
        output = name if kind is not None else ""
        if output:
            self.assigned.setdefault(name, set()).add(lane)
        variable = Variable(self.identifier(name, lane), kind)
        return Assign(variable, value, output, lane, line=place.lineno, column=place.col_offset)

    def identifier(self, name: str, lane: int | None) -> str:
        """A fresh identifier; operands' own names stay free for their inputs."""
        base = name if lane is None else f"{name}_{lane}"
        if name in self.operands or lane is not None:
            base = f"_{base}"
        fresh, count = base, 1
        while fresh in self.identifiers:
            count += 1
            fresh = f"_{base.lstrip('_')}__{count}"
        self.identifiers.add(fresh)
        return fresh

    def store(self, place: ast.Subscript, value: ast.expr) -> Assign:
        kind = self.memory(place, store=True)
        self.aim, self.lane = kind, None
        node = self.expression(value)
        self.assigned["stored"] = {None}
        return Assign(Variable(self.identifier("_stored", None), kind), node, "stored", None,
                      line=place.lineno, column=place.col_offset)  # fmt: skip

    def memory(self, node: ast.Subscript, store: bool) -> ValueType:
        """Notes the one access; returns its type."""
        parts = node.slice.elts if isinstance(node.slice, ast.Tuple) else []
        good = len(parts) == 2 and isinstance(parts[0], ast.Name) and isinstance(parts[1], ast.Name)
        if not good:
            raise _fault(node, "bad-access", _said(node), "mem[address operand, type]")
        name, kind = parts[0].id, parts[1].id  # type: ignore[attr-defined]
        if name not in self.operands or self.operands[name].role is not Role.ADDRESS:
            raise _fault(node, "bad-access", f"mem at {name}", "an operand such as at:address")
        if kind not in TYPES:
            raise _fault(node, "bad-access", f"mem of type {kind}", ", ".join(TYPES))
        found = TYPES[kind]
        access = Access(kind, found.width // 8, store)
        if self.access is not None and (store or self.access != access):
            raise _fault(node, "bad-access", "a second access to memory", "one load or one store")
        self.access = access
        return found

    # Lanes

    def two_lanes(self, name: str, place: ast.AST) -> None:
        if name in self.types and self.types[name].lanes != 2:
            raise _fault(place, "no-such-lane", f".re or .im of {name}", "an operand with two lanes")

    def lanes_in(self, value: ast.AST, place: ast.AST) -> int:
        """How many lanes k runs over: those of the operands and locals that stand with [k] (or an index of k)."""
        counts = set()
        for node in ast.walk(value):
            if isinstance(node, ast.Subscript) and isinstance(node.value, ast.Name):
                name = node.value.id
                if name in self.types and self.types[name].packed:
                    counts.add(self.types[name].lanes)
                elif name in self.lane_counts:
                    counts.add(self.lane_counts[name])
        if len(counts) != 1:
            found = "lanes of different number" if counts else "k over nothing with lanes"
            raise _fault(place, "no-such-lane", found, "operands with one number of lanes, as a[k]")
        return counts.pop()

    def index(self, node: ast.expr) -> int:
        """A lane number: an expression of k and literals."""
        try:
            return self._index(node)
        except (ValueError, ZeroDivisionError, OverflowError):
            raise _fault(node, "no-such-lane", f"lane {_said(node)}", "a number, k, or an expression of them") from None

    def _index(self, node: ast.expr) -> int:
        if isinstance(node, ast.Constant) and type(node.value) is int and abs(node.value) < 64:
            return node.value
        if _is_name(node, "k") and self.lane is not None:
            return self.lane
        if isinstance(node, ast.BinOp):
            left, right = self._index(node.left), self._index(node.right)
            operator = _ARITHMETIC.get(type(node.op))
            made = {"+": left + right, "-": left - right, "*": left * right, "^": left ^ right, "&": left & right}
            if operator in made and abs(made[operator]) < 64:
                return made[operator]
        raise ValueError

    # Expressions

    def expression(self, node: ast.expr) -> Node:
        self.nodes += 1
        self.depth += 1
        try:
            if self.nodes > MOST_NODES or self.depth > DEEPEST:
                raise _fault(node, "too-long", "a meaning too long or too deep",
                             f"{MOST_NODES} parts, {DEEPEST} levels, lanes counted")  # fmt: skip
            reader = _READERS.get(type(node))
            if reader is None:
                raise _fault(node, "not-in-language", _said(node),
                             "numbers, names, lanes, + - * // % << >> & | ^ ~, comparisons, and or not, x if c else y, functions")  # fmt: skip
            made = reader(self, node)
            made.line, made.column = node.lineno, node.col_offset
            return made
        finally:
            self.depth -= 1

    def constant(self, node: ast.Constant) -> Node:
        value = node.value
        if isinstance(value, bool):
            return Number(int(value), kind=TRUTH)
        if isinstance(value, int):
            if value >= 1 << LONGEST:
                raise _fault(node, "too-big", "a number of more than 128 bits", f"at most {LONGEST} bits")
            return Number(value)
        if isinstance(value, float):
            return self.real(node, value)
        raise _fault(node, "not-in-language", _said(node), "integers, and decimal numbers as binary32")

    def real(self, node: ast.AST, value: float) -> Node:
        try:
            return Real(struct.unpack("<I", struct.pack("<f", value))[0])
        except (OverflowError, struct.error):
            raise _fault(node, "too-big", f"{value}", "a number that binary32 holds") from None

    def name(self, node: ast.Name) -> Node:
        name = node.id
        if name == "k":
            if self.lane is None:
                raise _fault(node, "unknown-name", "k outside lanes", "d[k] = …, or sum(… for k)")
            return Number(self.lane)
        if name == "link":
            self.uses_link = True
            return Input("link", TYPES["u32"])
        return self.value_of(name, None, node)

    def value_of(self, name: str, lane: int | None, node: ast.AST) -> Node:
        variable = self.variables.get((name, lane))
        if variable is not None:
            return Local(variable)
        operand = self.operands.get(name)
        if lane is not None and operand is None and self.variables.get((name, None)) is not None:
            raise _fault(node, "no-such-lane", f"lane {lane} of {name}", f"{name} has no lanes")
        if operand is None or operand.role in (Role.ADDRESS, Role.TARGET, Role.STICKY):
            known = [n for n, o in self.operands.items() if o.role not in (Role.ADDRESS, Role.TARGET, Role.STICKY)]
            known += sorted({n for n, _ in self.variables if n not in self.operands})
            shown = name if lane is None else f"{name}[{lane}]"
            raise _fault(node, "unknown-name", shown, ", ".join(known) or "no names")
        if name in self.assigned and operand.role is not Role.INOUT:
            raise _fault(node, "unknown-name", f"{name} before it is assigned as a whole", "a local name")
        kind = self.types[name]
        if lane is not None and (not kind.packed or not 0 <= lane < kind.lanes):
            raise _fault(
                node, "no-such-lane", f"lane {lane} of {name}:{kind.name}", f"{kind.lanes} lane{'s' * kind.packed}"
            )
        self.read.add(name)
        return Input(name, kind, lane)

    def subscript(self, node: ast.Subscript) -> Node:
        if _is_name(node.value, "mem"):
            kind = self.memory(node, store=False)
            return Input("loaded", kind)
        if not isinstance(node.value, ast.Name):
            raise _fault(node, "not-in-language", _said(node), "a lane of a name: a[k], a[0]")
        return self.value_of(node.value.id, self.index(node.slice), node)

    def attribute(self, node: ast.Attribute) -> Node:
        if not isinstance(node.value, ast.Name) or node.attr not in _NAMED_LANES:
            raise _fault(node, "not-in-language", _said(node), "name.re or name.im")
        self.two_lanes(node.value.id, node)
        return self.value_of(node.value.id, _NAMED_LANES[node.attr], node)

    def unary(self, node: ast.UnaryOp) -> Node:
        operator = _UNARY.get(type(node.op))
        if operator is None:
            raise _fault(node, "not-in-language", "unary +", "- ~ not")
        return Unary(operator, self.expression(node.operand))

    def binary(self, node: ast.BinOp) -> Node:
        if isinstance(node.op, ast.Pow):
            base, power = node.left, node.right
            good = isinstance(base, ast.Constant) and base.value == 2 and isinstance(power, ast.Constant)
            if good and type(power.value) is int and 0 <= power.value < LONGEST:  # type: ignore[attr-defined]
                return Number(1 << power.value)  # type: ignore[attr-defined]
            raise _fault(node, "not-in-language", _said(node), "2**k with literal k below 128; shifts with <<")
        operator = _ARITHMETIC.get(type(node.op))
        if operator is None:
            raise _fault(node, "not-in-language", _said(node), "+ - * // % << >> & | ^, and / of floats")
        return Binary(operator, self.expression(node.left), self.expression(node.right))

    def compare(self, node: ast.Compare) -> Node:
        operands = [node.left, *node.comparators]
        parts: list[Node] = []
        for operator, left, right in zip(node.ops, operands, operands[1:]):
            symbol = _COMPARE.get(type(operator))
            if symbol is None:
                raise _fault(node, "not-in-language", _said(node), "== != < <= > >=")
            pair = Compare(symbol, self.expression(left), self.expression(right))
            pair.line, pair.column = left.lineno, left.col_offset
            parts.append(pair)
        return parts[0] if len(parts) == 1 else Logic("and", tuple(parts))

    def logic(self, node: ast.BoolOp) -> Node:
        word = "and" if isinstance(node.op, ast.And) else "or"
        return Logic(word, tuple(self.expression(part) for part in node.values))

    def choose(self, node: ast.IfExp) -> Node:
        return Choose(self.expression(node.test), self.expression(node.body), self.expression(node.orelse))

    def call(self, node: ast.Call) -> Node:
        name = node.func.id if isinstance(node.func, ast.Name) else ""
        special = _SPECIAL.get(name)
        if name not in FUNCTIONS and special is None:
            raise _fault(node, "unknown-function", _said(node.func), " ".join(ALL_FUNCTIONS))
        if node.keywords or any(isinstance(a, ast.Starred) for a in node.args):
            raise _fault(node, "bad-arguments", f"{name} with named or starred arguments", "plain arguments")
        if special is not None:
            return special(self, node, name)
        count, form = FUNCTIONS[name]
        _count(node, name, count, count, form)
        return Call(name, tuple(self.expression(argument) for argument in node.args))

    def gathered(self, node: ast.Call, name: str) -> Node:
        """sum, min, max: over lanes, or (min and max) over their arguments."""
        if len(node.args) == 1 and isinstance(node.args[0], ast.GeneratorExp):
            parts = self.over_lanes(node.args[0])
        elif name == "sum":
            raise _fault(node, "bad-arguments", _said(node), "sum(expression for k)")
        else:
            _count(node, name, 2, 16, f"{name}(a, b, …) or {name}(expression for k)")
            parts = [self.expression(argument) for argument in node.args]
        made = parts[0]
        for part in parts[1:]:
            made = Binary("+", made, part) if name == "sum" else Call(name, (made, part))
            made.line, made.column = node.lineno, node.col_offset
        return made

    def over_lanes(self, node: ast.GeneratorExp) -> list[Node]:
        loop = node.generators[0]
        plain = len(node.generators) == 1 and not loop.ifs and not loop.is_async
        if not plain or not _is_name(loop.target, "k") or not _is_name(loop.iter, "_"):
            raise _fault(node, "not-in-language", _said(node), "expression for k")
        outer = self.lane
        try:
            parts = []
            for lane in range(self.lanes_in(node.elt, node)):
                self.lane = lane
                parts.append(self.expression(node.elt))
            return parts
        finally:
            self.lane = outer

    def concat(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 2, LONGEST, "concat(high, …, low)")
        return Call(name, tuple(self.expression(argument) for argument in node.args))

    def fit(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 1, 2, f"{name}(x) or {name}(x, bits)")
        how = name.removeprefix("u")
        if len(node.args) == 2:
            value = node.args[1]
            if (
                isinstance(value, ast.Name)
                and name in ("wrap", "sat")
                and value.id in TYPES
                and not TYPES[value.id].packed
            ):
                kind = TYPES[value.id]
                return Fit(how, kind.bits, kind.signed, self.expression(node.args[0]))
            bits = self.literal(value, 1, LONGEST, f"{name}(x, bits)")
            return Fit(how, bits, name == how, self.expression(node.args[0]))
        if self.aim is None or self.aim.floating or name != how:
            allowed = f"{name}(x, bits)" if name != how else f"{name}(x, bits), or an assignment to an integer result"
            raise _fault(node, "bad-arguments", f"{name}(x) with nothing to say the width", allowed)
        return Fit(how, self.aim.bits, self.aim.signed, self.expression(node.args[0]))

    def round(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 3, 3, "round(x, n, MODE)")
        mode = self.word(node.args[2], MODES)
        return Call(name, (self.expression(node.args[0]), self.expression(node.args[1])), mode=mode)

    def float_to_int(self, node: ast.Call, name: str) -> Node:
        _count(node, name, 3, 3, "float_to_int(x, type, MODE)")
        kinds = [kind for kind, found in TYPES.items() if not found.packed and not found.floating]
        kind = TYPES[self.word(node.args[1], kinds)]
        mode = self.word(node.args[2], FLOAT_MODES)
        return Call(name, (self.expression(node.args[0]),), mode=mode, to=kind)

    def iterate(self, node: ast.Call, name: str) -> Node:
        form = "iterate(n, name, step)"
        _count(node, name, 3, 3, form)
        count = self.literal(node.args[0], 1, MOST_ITERATIONS, form)
        if not isinstance(node.args[1], ast.Name):
            raise _fault(node, "bad-arguments", _said(node.args[1]), f"{form} with a name that has a value")
        over = node.args[1].id
        start = self.expression(node.args[1])
        variable = Variable(self.identifier("_i_" + over, None))
        key = (over, None)
        before, steps, nodes = self.variables.get(key), self.steps, self.nodes
        self.variables[key] = variable
        self.steps *= count
        try:
            step = self.expression(node.args[2])
        finally:
            if before is None:
                del self.variables[key]
            else:
                self.variables[key] = before
        if self.steps * (self.nodes - nodes) > MOST_STEPS:
            raise _fault(node, "too-long", "iterations too many for their step", f"{MOST_STEPS} computed parts in all")
        self.steps = steps
        return Iterate(count, variable, start, step)

    def literal(self, node: ast.expr, low: int, high: int, form: str) -> int:
        value = node.value if isinstance(node, ast.Constant) else None
        if type(value) is not int or not low <= value <= high:
            raise _fault(node, "bad-arguments", _said(node), f"{form} with a literal from {low} to {high}")
        return value

    def word(self, node: ast.expr, allowed: Sequence[str]) -> str:
        if not isinstance(node, ast.Name) or node.id not in allowed:
            raise _fault(node, "bad-arguments", _said(node), ", ".join(allowed))
        return node.id


_READERS: Mapping[type, object] = {
    ast.Constant: _Parser.constant,
    ast.Name: _Parser.name,
    ast.Subscript: _Parser.subscript,
    ast.Attribute: _Parser.attribute,
    ast.UnaryOp: _Parser.unary,
    ast.BinOp: _Parser.binary,
    ast.Compare: _Parser.compare,
    ast.BoolOp: _Parser.logic,
    ast.IfExp: _Parser.choose,
    ast.Call: _Parser.call,
}
_SPECIAL: Mapping[str, object] = {
    "sum": _Parser.gathered,
    "min": _Parser.gathered,
    "max": _Parser.gathered,
    "concat": _Parser.concat,
    "wrap": _Parser.fit,
    "sat": _Parser.fit,
    "uwrap": _Parser.fit,
    "usat": _Parser.fit,
    "round": _Parser.round,
    "float_to_int": _Parser.float_to_int,
    "iterate": _Parser.iterate,
}


def _is_name(node: ast.AST, name: str) -> bool:
    return isinstance(node, ast.Name) and node.id == name


def _count(node: ast.Call, name: str, least: int, most: int, form: str) -> None:
    if not least <= len(node.args) <= most or any(isinstance(a, ast.GeneratorExp) for a in node.args):
        raise _fault(node, "bad-arguments", f"{name} with {len(node.args)} argument{'s' * (len(node.args) != 1)}", form)


def _said(node: ast.AST) -> str:
    """The node as text, short, for a message."""
    try:
        text = ast.unparse(node).replace(_IN, "")
    except (ValueError, RecursionError):
        text = "this expression"
    return text if len(text) <= 60 else text[:57] + "…"


def _fault(node: ast.AST, name: str, found: str, allowed: str, remedy: str = "") -> Fault:
    line, column = getattr(node, "lineno", 1), getattr(node, "col_offset", 1)
    return Fault(name, found, allowed, remedy, line=line, column=column)
