"""Commands and answers: places, conditions, stops, what-if, forms; and one clear line for whatever cannot be done."""

from __future__ import annotations

import pytest

from tests.shell.helping import answers, from_text, session
from vliwsim.faces.shell.commands import COMMANDS, MORE, Shell, named
from vliwsim.faces.shell.completion import offers
from vliwsim.faces.shell.lines import plain, tint
from vliwsim.faces.shell.view import prompt_text, three_lines
from vliwsim.kernel.loading import assemble_source
from vliwsim.machine.recorder import Record, record
from vliwsim.shell.conditions import condition
from vliwsim.shell.faults import Unclear
from vliwsim.shell.session import Session


def early(x: list[int]) -> Session:
    return session("tests/shell/early_read", {"x": x})


@pytest.fixture
def six() -> Session:
    return early([5, -7, 11, 2, 30, -1])


# ------------------------------------------------------------------------------------------------------- moving about


def test_the_prompt_says_where_it_stands(six: Session) -> None:
    assert prompt_text(six) == "0 · start@0 ? "
    six.go(14)
    assert prompt_text(six) == "14 · loop@6 · pass 1 ? "
    answers(six, "suppose product = 4")
    assert prompt_text(six) == "14 · loop@6 · pass 1 · supposing ? "
    six.to_end()
    assert prompt_text(six) == f"{six.cycle} · end · supposing ? "


@pytest.mark.parametrize(
    ("command", "cycle"),
    [
        ("ahead", 15),
        ("ahead 3", 17),
        ("back", 13),
        ("back 14", 0),
        ("back 15", 0),
        ("at cycle 31", 31),
        ("at 2", 2),
        ("at loop@2", 17),
        ("at loop", 15),
        ("at loop@6", 21),
        ("at start@4", 4),
        ("at loop@2 pass 4", 31),
        ("at loop pass 1", 8),
        ("at finish@1", 44),
        ("at end", 45),
        ("seek landed product", 15),
        ("seek back landed product", 7),
        ("seek stored y[3]", 28),
        ("seek stored y[3:5]", 28),
        ("seek stored y", 21),
        ("seek back stored y[0]", 7),
        ("seek product == 33", 22),
        ("seek pass == 3 and cycle % 2 == 0", 22),
        ("seek product.lo < 0", 15),
        ("seek not stalled", 15),
        ("seek y[0] == 15 and y[1] == 15", 15),
    ],
)
def test_moves(six: Session, command: str, cycle: int) -> None:
    answers(six, "at cycle 14", command)
    assert six.cycle == cycle


def test_a_place_behind_is_gone_to_where_none_is_ahead(six: Session) -> None:
    answers(six, "at cycle 40", "at start@4")
    assert six.cycle == 4


def test_the_end_is_the_place_even_where_it_costs_no_cycle() -> None:
    one = session("energy", {"n": 64})
    answers(one, "at end", "back 1", "at finish@0 pass 1")
    assert one.cycle == 23


def test_again_repeats_the_last_move(six: Session) -> None:
    said = answers(six, "ahead 2", "again", "again 3")
    assert six.cycle == 10
    assert said.count("issues") == 3  # of several only the last is shown
    assert "no move to make again" in answers(early([1, 2, 3, 4]), "again")
    answers(six, "seek landed product", "again", "back 1", "again 2")
    assert six.cycle == 19


def test_a_condition_that_holds_nowhere_leaves_the_run_where_it_is(six: Session) -> None:
    said = answers(six, "at cycle 9", "seek product == 12345")
    assert "nowhere; still in cycle 9" in said
    assert six.cycle == 9


def test_undefined_is_no_condition(six: Session) -> None:
    answers(six, "seek h3 == 0 or cycle == 4")
    assert six.cycle == 0  # h3 is never defined


# ------------------------------------------------------------------------------------------------------------- alarms


def test_alarms_stop_moves_ahead(six: Session) -> None:
    said = answers(six, "alarm stored y[2]", "alarm product > 20", "alarms", "at end")
    assert "1  stored y[2]" in said
    assert "alarm 1: stored y[2]" in said
    assert six.cycle == 21
    said = answers(six, "at end")
    assert six.cycle == 22  # product lands as 33
    assert "alarm 2: product > 20" in said
    answers(six, "at end")
    assert six.cycle == 36  # from 33 to 6 and up to 90: it comes to hold once more
    answers(six, "back 30")
    assert six.cycle == 6
    answers(six, "silence 1", "silence 2", "at end")
    assert six.state.finished


def test_an_alarm_goes_before_the_place_one_asked_for(six: Session) -> None:
    answers(six, "alarm landed sample", "at loop@6 pass 3")
    assert six.cycle == 4
    answers(six, "at end", "silence 1", "alarm landed product", "at loop@6 pass 3")
    assert six.cycle == 15
    answers(six, "at cycle 0", "at loop@6")
    assert six.cycle == 7


# ------------------------------------------------------------------------------------------------------------ what if


def test_what_is_supposed_lasts_and_what_was_recorded_comes_back(six: Session) -> None:
    answers(six, "at loop@6 pass 1", "suppose product = -21", "at end")
    assert "y[0]   15  -21" in answers(six, "tell y[0:4]").replace("    ", " ") or "-21" in answers(six, "tell y[1]")
    answers(six, "back 100")
    assert six.cycle == 0
    assert "undefined" in answers(six, "tell y[0]")
    answers(six, "at end")
    assert "y[1] = -21" in answers(six, "tell y[1]")
    assert "supposed: product in cycle 14" in answers(six, "why y[1]")
    answers(six, "suppose y[0:2] = 7")
    assert "= 7" in answers(six, "tell y[1]")
    answers(six, "forget")
    assert six.cycle == 14
    assert not six.supposing
    answers(six, "at end")
    assert "y[1] = 15" in answers(six, "tell y[1]")


def test_a_supposed_register_replaces_what_lands_in_that_beat(six: Session) -> None:
    answers(six, "at cycle 15", "suppose product = 4")
    assert "product = 4" in answers(six, "tell product")
    assert "supposed: product in cycle 15" in answers(six, "why product")
    answers(six, "ahead 2")
    assert "product = 4" in answers(six, "tell product")


# ------------------------------------------------------------------------------------------------------------- telling


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("product", "  product = 15 (0xf)"),
        ("g6", "  g6 = 15 (0xf)"),
        ("g6 as hex", "  g6 = 0x0000000f"),
        ("g6 as bits", "  g6 = 00000000 00000000 00000000 00001111"),
        ("g6 as i16x2", "  g6 = [15, 0]"),
        ("g6 as q15", "  g6 = 0.000457763672"),
        ("g6 * 2 + n", "  g6 * 2 + n = 36"),
        ("x[1] == -7", "  x[1] == -7 = yes"),
        ("x[0:3]", "  x[0]   5  -7  11"),
        ("x[0:3] as hex", "  x[0]  0x0005  0xfff9  0x000b"),
        ("x[1] as q15", "  x[1] = -0.000213623047"),
        ("addr(x), len(y)", "  addr(x) = 64\n  len(y) = 6"),
        ("cycle, pass", "  cycle = 14\n  pass = 1"),
        ("h3", "  h3 = undefined"),
        ("y[5]", "  y[5] = undefined"),
        ("product.lo", "  product.lo = 15"),
        ("max(g6, 20) if n > 2 else 0", "  max(g6, 20) if n > 2 else 0 = 20"),
    ],
)
def test_tell(six: Session, text: str, said: str) -> None:
    six.go(14)
    assert answers(six, f"tell {text}") == said


def test_a_long_slice_has_an_index_at_every_row() -> None:
    one = session("energy", {"n": 64})
    rows = answers(one, "tell x").splitlines()
    assert all(len(row) <= 80 for row in rows)
    assert rows[0].startswith("  x[0]")
    assert rows[-1].split()[0].startswith("x[")


# -------------------------------------------------------------------------------------------------- what cannot be done

REFUSED = {
    "jump": "no command jump",
    "a": "a could be ahead or again or at or alarm or alarms",
    "s": "s could be seek or silence or suppose",
    "ahead x": "x · allowed: a number of cycles",
    "ahead -4": "-4 · allowed: a number",
    "back 1 2": "1 2 · allowed: a number",
    "at": "nothing is no place",
    "at nowhere@3": "no label nowhere",
    "at loop@99": "loop has no beat 99",
    "at loop@1 pass 0": "pass 0",
    "at wrong z": "z is no output",
    "seek": "no condition",
    "seek back": "no condition",
    "seek g99 == 1": "g99 means nothing here",
    "seek landed g99": "g99 is no register",
    "seek stored q[1]": "q is no array",
    "seek stored y[99]": "y[99] · allowed: elements y[0] to y[5]",
    "seek landed": "landed with nothing behind it",
    "seek g6 = 1": "not an expression · allowed",
    "seek 1 // 0": "a division by zero",
    "seek 1 // (cycle - 20) == 3": "a division by zero",
    "seek product ** product ** product > 1": "",
    "seek x == 1": "",
    "seek __import__('os')": "",
    "seek differs z": "z is no output",
    "alarm nothing_such > 1": "nothing_such means nothing here",
    "silence 7": "no alarm 7",
    "silence one": "one · allowed: the number of an alarm",
    "flight g99": "g99 is no register",
    "tell": "nothing to tell",
    "tell g99": "g99 means nothing here",
    "tell h3 + 1": "h3 is undefined here",
    "tell g6 as qq": "qq is no form",
    "tell x[7]": "x[7] · allowed: elements x[0] to x[5]",
    "tell x[3:2]": "x[3:2]",
    "why": "nothing to explain",
    "why g99": "g99 is no register",
    "why y": "y is an array",
    "why y[99]": "y[99]",
    "uses": "nothing to follow",
    "uses z[1]": "z is no array",
    "judge x": "x is no output",
    "suppose": "nothing · allowed: a register or element",
    "suppose g14": "g14 · allowed",
    "suppose g99 = 1": "g99 is no register",
    "suppose g14 = 2 ** 40": "does not fit a register",
    "suppose x[0] = 40000": "",
    "suppose x[0] = 0.5": "",
    "suppose g14 = h3": "h3 is undefined here",
    "suppose product == 3": "",
    "forget": "nothing is supposed",
    "draw": "nothing to draw",
    "draw q": "q is no register",
    "draw x as hex": "a drawing as hex",
    "draw x with q": "q is no array",
    "draw x with reference": "x is no output",
    "draw g6 over 0": "over 0",
    "play": "no file to play",
    "play /no/such/file": "/no/such/file: No such file",
    "leave now": "now behind leave",
    "help juggle": "no command juggle",
    "here we": "we behind here",
}


@pytest.mark.parametrize("line", REFUSED)
def test_what_cannot_be_done_is_said_in_one_line_and_changes_nothing(six: Session, line: str) -> None:
    six.go(14)
    said = answers(six, line)
    assert said.startswith("  cannot: ")
    assert REFUSED[line] in said
    assert "\n" not in said
    assert "event_" not in said
    assert "half_" not in said
    assert six.cycle == 14
    assert not six.supposing
    assert not six.alarms


def test_an_alarm_without_a_value_says_so_where_it_has_none(six: Session) -> None:
    said = answers(six, "alarm 6 // (cycle - 3) > 100", "ahead 9")
    assert "a division by zero" in said


def test_without_a_reference_there_is_nothing_to_judge_by() -> None:
    one = from_text("kernel tried\ncore pair7\nreturns y : i32 in g1\nstart:\n@0 li g1, 4\n   halt\n")
    said = answers(one, "judge", "at wrong y", "seek differs")
    assert said.count("there is no reference to judge by") == 3


# ------------------------------------------------------------------------------------------------------------- hazards

CLASH = """kernel clash
core pair7
given x : i32[n] at g10
returns y : i32 in g6

start:
@0 mul g6, g10, 3
@2 add g6, g10, 1
@3 add g7, g6, 1
   halt
"""


def test_a_hazard_stops_the_run_where_it_is() -> None:
    one = from_text(CLASH, {"x": [1, 2]})
    said = answers(one, "at end", "here", "flight g6", "why g10", "tell g10")
    assert one.cycle == 3
    assert "the run cannot go on" in said
    assert "illegal, lands-twice: two results reach g6" in said
    assert "tried.vliw:7:4  lands-twice  (illegal)" in said
    assert "try" in said
    assert said.count("lands now") == 1
    assert "g10 = 64" in said
    said = answers(one, "ahead 1", "back 1")
    assert one.cycle == 2
    assert "the run cannot go on" in said
    answers(one, "seek illegal")
    assert one.cycle == 3
    answers(one, "at cycle 1", "alarm illegal", "ahead 50")
    assert one.cycle == 3
    answers(one, "silence 1", "at cycle 1", "suppose g10 = 8", "at end")
    assert one.cycle == 3


def test_a_hazard_behind_the_halt_stops_the_drain() -> None:
    text = CLASH.replace("@3 add g7, g6, 1\n   halt", "   halt")
    one = from_text(text, {"x": [1, 2]})
    said = answers(one, "at end", "here", "back 1")
    assert "lands-twice" in said
    assert one.cycle == 2


# ---------------------------------------------------------------------------------------------------------- the screen


def test_three_lines_fit_the_terminal(six: Session) -> None:
    energy = session("energy", {"n": 64})
    for width in (20, 40, 80, 200):
        for cycle in (0, 7, 12, 24, 25):
            energy.go(cycle)
            lines = three_lines(energy, width)
            assert len(lines) == 3
            assert all(len(plain(line)) <= max(width, 24) for line in lines)
            assert [plain(line).split()[0] for line in lines] == ["landed", "issues", "out"]


def test_a_result_and_its_readers_share_a_tint(six: Session) -> None:
    """product lands in cycle 7 and the bundle of that cycle stores it."""
    six.go(7)
    lines = three_lines(six, 80)
    tints = {style for line in lines[:2] for style, text in line if text.split(" ")[0] == "product"}
    assert tints == {tint(6, 15)}


def test_the_help_has_every_command_with_an_example_that_parses(six: Session) -> None:
    said = answers(six, "help")
    assert all(len(line) <= 80 for line in said.splitlines())
    for command in COMMANDS.values():
        assert command.example in said
        assert named(command.example.split()[0]) == command.name
        assert command.example in answers(six, f"help {command.name}")
    assert set(MORE) <= set(COMMANDS)
    assert len([*COMMANDS]) + 1 <= 24
    assert "16 × 16" in answers(six, "help mul.half") or "mul.half" in answers(six, "help mul.half")


def test_beginnings() -> None:
    assert named("ah") == "ahead"
    assert named("alarm") == "alarm"
    assert named("j") == "judge"
    with pytest.raises(Unclear, match="ahead or again or at or alarm or alarms"):
        named("a")


@pytest.mark.parametrize(
    ("text", "offered"),
    [
        ("", {"ahead", "help", "why"}),
        ("al", {"alarm", "alarms"}),
        ("at lo", {"loop", "loop@0", "loop@6"}),
        ("at loop@2 ", {"pass"}),
        ("at wrong ", {"y"}),
        ("seek l", {"landed"}),
        ("seek ", {"back", "stored", "illegal", "differs", "g6", "product", "y", "n"}),
        ("seek landed p", {"product"}),
        ("seek back stored ", {"x", "y"}),
        ("tell pro", {"product"}),
        ("tell x as q", {"q15", "q31", "q15x2"}),
        ("draw y with r", {"reference"}),
        ("why s", {"stall", "sample"}),
        ("uses sam", {"sample"}),
        ("judge ", {"y"}),
        ("help mul.h", {"mul.half"}),
        ("flight g2", {"g2", "g20", "g21", "g22", "g23"}),
        ("zz ", set()),
        ("a ", set()),
    ],
)
def test_completion(six: Session, text: str, offered: set[str]) -> None:
    assert offered <= set(offers(six, text)[1])
    if not offered:
        assert not offers(six, text)[1]


def test_completion_of_an_alarm_number(six: Session) -> None:
    answers(six, "alarm illegal")
    assert offers(six, "silence ")[1] == ["1"]


# ------------------------------------------------------------------------------------------------------------- drawing


def test_drawing_puts_values_where_the_axis_says() -> None:
    one = session("window_scale", {"n": 64, "gain": 0})
    said = answers(one, "draw window as q15").splitlines()
    assert said[0] == "  window[0:64] as q15"
    assert said[1].split("│")[0].strip() == "1"  # 32767 / 32768 to four digits
    assert said[12].split("│")[0].strip() == "0"
    rows = [line.partition("│")[2] for line in said[1:13]]
    assert rows[0].rstrip()[-1] in "⠀⠁⠂⠉⠒⠈⠐⠑⠊⠔⡠⢄⣀⠤⠦⠴⢀⡀⠢⢄"
    middle = len(rows[0].strip()) // 2 + len(rows[0]) - len(rows[0].lstrip())
    assert abs(middle - 16) <= 1  # the top of a raised cosine is in its middle
    assert said[-1].split() == ["0", "element", "63"]


def test_drawing_with_the_reference_shows_rings_only_where_it_is_elsewhere(six: Session) -> None:
    six.to_end()
    said = answers(six, "draw y with reference")
    assert "o" in said.splitlines()[3]
    good = session("window_scale", {"n": 64, "gain": 0})
    good.to_end()
    picture = answers(good, "draw y with reference").splitlines()[1:]
    assert not any("o" in line.partition("│")[2] for line in picture)


def test_drawing_a_register_over_time(six: Session) -> None:
    six.to_end()
    said = answers(six, "draw product", "draw product over 10 with sample")
    assert "product, cycle by cycle" in said
    assert "o is sample where it is elsewhere" in said
    assert "nothing to draw" in answers(six, "draw h3")


def test_floats_are_floats() -> None:
    text = "kernel tried\ncore float3\ngiven x : f32[n] at g10\nreturns y : f32 in g6\nstart:\n@0 lw g6, [g10 + 4]\n"
    one = from_text(text + "@8 halt\n", {"x": [0.5, -2.25, 1e20]})
    one.to_end()
    said = answers(
        one, "tell y, x, x[1] * 2, g6 as f32", "seek back x[1] < 0 and y == -2.25", "draw x as f32", "tell cycle"
    )
    assert "y = -2.25" in said
    assert "x[0]    0.5  -2.25  1e+20" in said
    assert "x[1] * 2 = -4.5" in said
    assert "g6 = -2.25" in said
    answers(one, "suppose x[0] = 0.75", "suppose g7 = 1.5")
    assert "0.75" in answers(one, "tell x")
    assert "g7 = 1.5" in answers(one, "tell g7 as f32")


def test_all_commands_at_every_cycle_of_a_run_answer_something(six: Session) -> None:
    shell = Shell(six, lambda lines: None)
    for cycle in range(0, 46):
        six.go(cycle)
        for line in ("here", "flight", "tell g6, y", "why product", "why y[0]", "uses product", "judge", "why stall"):
            assert shell.answer(line), (cycle, line)
        assert six.cycle == cycle
    assert assemble_source("tests/shell/early_read").name == "early_read"


# ------------------------------------------------------------------------------- events, against what a recorder hears

LOCKED = """kernel locked
core lone4
given x : i32[n] at g10
given left : i32 = n - 1 in g4
returns y : i32[n] at g11

loop:
@0 lw g2, [g10 then +4]
@1 add g3, g2, 1
@2 sw g3, [g11 then +4] ; count g4, loop
finish:
@0 idle
@1 halt
"""


@pytest.mark.parametrize("name", ["window_scale", "early_read", "locked"])
def test_conditions_hold_exactly_where_a_recorder_hears_their_events(name: str) -> None:
    if name == "locked":
        one = from_text(LOCKED, {"x": list(range(9))}, core="lone4")
    else:
        one = session(name, {"n": 32, "gain": 1}) if name == "window_scale" else early([5, -7, 11, 2, 30, -1])
    array, number = one.names.arrays["y"], one.names.register("g6" if name != "locked" else "g3")
    heard: dict[str, set[int]] = {"stored": set(), "landed": set(), "stalled": set()}

    def listen(record: Record) -> None:
        end = array.start + array.length * array.element.bytes
        if any(array.start <= address < end for address, _, _ in record.stores):
            heard["stored"].add(record.cycle)
        if any(landing.register == number for landing in record.landings):
            heard["landed"].add(record.cycle)
        if record.cause:
            heard["stalled"].add(record.cycle)
        frozen = sum(cycles for _, cycles in record.freezes)
        heard["stalled"] |= set(range(record.cycle + 1, record.cycle + 1 + frozen))

    undo = record(one.machine, listen)
    state = one.machine.start({}, (), one.state.memory.regions)
    state.restore(one.recorded.first)
    one.machine.run(state)
    undo()
    texts = {"stored": "stored y", "landed": f"landed {one.kernel.core.register_names[number]}", "stalled": "stalled"}
    for event, text in texts.items():
        wanted, found = condition(one, text), set()
        one.go(0)
        while one.state.halt_beat is None:
            if wanted.holds(one, one.state):
                found.add(one.cycle)
            one.go(one.cycle + 1)
        assert found == heard[event], event
    assert heard["stored"]
    assert heard["landed"]
    assert bool(heard["stalled"]) == (name == "locked")
