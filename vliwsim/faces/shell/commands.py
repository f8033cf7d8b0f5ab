"""The commands: one row each with its form, an example and a sentence; help, completion and dispatch come from it."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from pathlib import Path

import attrs

from vliwsim.description.manual import manual
from vliwsim.faces.shell import reasons, view
from vliwsim.faces.shell.answers import draw, tell
from vliwsim.faces.shell.lines import Line, wrapped
from vliwsim.faces.shell.scripts import read_script
from vliwsim.shell.conditions import condition
from vliwsim.shell.edits import suppose
from vliwsim.shell.faults import Unclear, at_line, listed, nearest, unclear
from vliwsim.shell.forms import form_named
from vliwsim.shell.history import Watch
from vliwsim.shell.nodes import Step
from vliwsim.shell.origins import maker, origin_of
from vliwsim.shell.places import place
from vliwsim.shell.readers import uses_of_bytes, uses_of_register
from vliwsim.shell.session import Arrival, Session
from vliwsim.shell.stalls import stall_here

NESTED = 8
"""Scripts that play scripts, at most."""


@attrs.frozen(eq=False)
class Command:
    """``wants`` says what its completion offers; ``moves``: it may leave the cycle, and ``again`` repeats it."""

    name: str
    form: str
    example: str
    says: str
    wants: tuple[str, ...] = ()
    moves: bool = False


COMMANDS: dict[str, Command] = {
    command.name: command
    for command in (
        Command("ahead", "ahead [N]", "ahead 4", "go N cycles on, 1 if nothing is said", moves=True),
        Command("back", "back [N]", "back 2", "go N cycles back", moves=True),
        Command("again", "again [N]", "again 3", "make the last move once more, or N times", moves=True),
        Command("at", "at PLACE", "at loop@2 pass 7", "go there, in either direction", ("places",), moves=True),
        Command("seek", "seek [back] COND", "seek landed g6", "go where a condition holds next", ("conditions",), True),
        Command("alarm", "alarm COND", "alarm stored y[3]", "stop every move ahead where it holds", ("conditions",)),
        Command("alarms", "alarms", "alarms", "list the standing stops"),
        Command("silence", "silence N", "silence 1", "remove a standing stop", ("alarms",)),
        Command("here", "here", "here", "this bundle in full: its reads, results, stores"),
        Command("flight", "flight [REG]", "flight g6", "what is out, by landing beat", ("registers",)),
        Command("tell", "tell EXPR… [as FORM]", "tell x[0:8] as q15", "registers, memory, expressions", ("values",)),
        Command("why", "why REG|ELEMENT|stall", "why y[3]", "where it came from, back to the inputs", ("origins",)),
        Command("uses", "uses REG|ELEMENT", "uses g6", "who reads it next", ("elements",)),
        Command("judge", "judge [OUTPUT]", "judge y", "outputs against the reference, so far", ("outputs",)),
        Command("suppose", "suppose WHAT = EXPR", "suppose g14 = 7", "change it, on a branch of time", ("elements",)),
        Command("forget", "forget", "forget", "return to the recorded run"),
        Command("draw", "draw WHAT [as FORM] [with WHAT]", "draw y[0:64] with reference", "plot it", ("values",)),
        Command("play", "play FILE", "play steps.txt", "run the commands in a file"),
        Command("leave", "leave", "leave", "end the shell"),
        Command("help", "help [COMMAND|OPERATION]", "help seek", "this list, or more of one", ("commands",)),
    )
}
"""Every command, in the order of the help."""

MORE = {
    "ahead": "At the end of the run, at a hazard and at an alarm it stops.",
    "at": "Places: loop@2 (the next time, else the last time it was there), loop@2 pass 7, cycle 31, end, and wrong y, "
    "where the first wrong element of y is stored.",
    "seek": "Conditions are expressions as in needs, over registers (signed), g4.lo, arrays, sizes, cycle, beat and "
    "pass, with landed g6, stored y[3], stalled, stalled bank, illegal, differs and differs y in them: "
    "seek back landed g6 and g6 < 0. Where something undefined is asked for, a condition does not hold.",
    "alarm": "Conditions are those of seek. One of values rings when it comes to hold, one with an event in it each "
    "time.",
    "tell": "Forms: i8 … u32, q15, q31, f32, i16x2, u16x2, q15x2, i8x4, u8x4, hex and bits. Several expressions are "
    "separated by commas.",
    "why": "why stall explains this stalled cycle, or the last one before. Of guards and addresses it tells what "
    "depends on data.",
    "judge": "A scalar is judged when the run is over, an array as far as it is written.",
    "suppose": "Elements take the array's type (x[0:4] = 0.5 for q15), registers a number or with as the given type. "
    "What was recorded is not lost: forget returns to it.",
    "draw": "WHAT is a slice x[0:256], an array, or a register, drawn over the last 200 cycles or over N: draw g6 over "
    "50. After with stands another array, or reference; its points are rings where the first has none.",
    "play": "A file has a command a line, # begins a comment. It ends at the first line that cannot be followed.",
}
"""What ``help COMMAND`` adds."""


class Shell:
    """Follows commands on one session and writes answers with ``write``, a line of pieces at a time.

    ``width`` tells how wide a line may be, ``watch`` whether a long move is to stop.
    """

    def __init__(
        self,
        session: Session,
        write: Callable[[list[Line]], None],
        *,
        width: Callable[[], int] = lambda: 80,
        watch: Watch | None = None,
    ) -> None:
        self.session, self.write, self.width, self.watch = session, write, width, watch
        self.left = False
        self._last_move = ""
        self._playing: list[Path] = []

    # ------------------------------------------------------------------------------------------------------- following

    def follow(self, text: str) -> None:
        """Follow one line; raises :class:`~vliwsim.shell.faults.Unclear` where it cannot be, and has done nothing."""
        text = text.partition("#")[0].strip()
        if not text:
            return
        word, _, rest = text.partition(" ")
        command = COMMANDS[named(word)]
        rest = " ".join(rest.split()) if command.name != "play" else rest.strip()
        getattr(self, f"_{command.name}")(rest)
        if command.moves and command.name != "again":
            self._last_move = f"{command.name} {rest}"

    def answer(self, text: str) -> bool:
        """Follow one line, and say why where it cannot be followed; whether it was."""
        try:
            self.follow(text)
        except Unclear as fault:
            self.write([[("wrong", "  cannot: "), ("", fault.line)]])
            return False
        return True

    def show(self) -> None:
        """The three lines."""
        self.write(view.three_lines(self.session, self.width()))

    def _arrived(self, arrival: Arrival, sought: str = "") -> None:
        """Say how a move ended where it did not simply get there, then show what stands there."""
        says = {
            "start": "this is the start",
            "end": "the run is over",
            "hazard": "the run cannot go on",
            "stopped": f"stopped in cycle {self.session.cycle}",
            "nowhere": f"{sought or 'that'}: nowhere; still in cycle {self.session.cycle}",
        }
        if arrival.why == "alarm":
            self.write([[("faint", "  alarm "), ("", f"{arrival.alarm}: {self.session.alarms[arrival.alarm].text}")]])
        elif arrival.why in says:
            self.write([[("faint", f"  {says[arrival.why]}")]])
        if arrival.why != "nowhere":
            self.show()

    @staticmethod
    def _count(rest: str) -> int:
        if not rest:
            return 1
        if not re.fullmatch(r"\d{1,15}", rest):
            raise unclear(rest, "a number of cycles", "ahead 4")
        return int(rest)

    @staticmethod
    def _nothing(rest: str, name: str) -> None:
        if rest:
            raise unclear(f"{rest} behind {name}", f"{name} alone")

    # ----------------------------------------------------------------------------------------------------------- moves

    def _ahead(self, rest: str) -> None:
        self._arrived(self.session.move(self._count(rest), self.watch))

    def _back(self, rest: str) -> None:
        self._arrived(self.session.move(-self._count(rest), self.watch))

    def _again(self, rest: str) -> None:
        times = self._count(rest)
        if not self._last_move:
            raise unclear("no move to make again", "again after a move", "ahead 4")
        if times > 100_000:
            raise unclear(f"again {times}", "at most 100000 times")
        write, kept = self.write, list[list[Line]]()
        for k in range(times):
            before = self.session.cycle
            kept.clear()
            self.write = kept.append
            try:
                self.follow(self._last_move)
            finally:
                self.write = write
            if self.session.cycle == before or (k % 16 == 15 and self.watch and self.watch(self.session.cycle)):
                break
        for lines in kept:
            self.write(lines)

    def _at(self, rest: str) -> None:
        where = place(self.session.layout, rest)
        if where.kind != "wrong":
            self._arrived(self.session.to_place(where, self.watch), rest)
            return
        self._to_wrong(where.name)

    def _to_wrong(self, name: str) -> None:
        """To the operation that made the first wrong element, so far or else at the end."""
        session = self.session
        wanted = [session.output_named(name)] if name else None
        stood = session.cycle
        found = session.judge.wrong(session.state, wanted)
        if found is None:
            session.go(1 << 60, self.watch)
            found = session.judge.wrong(session.state, wanted)
        if found is None:
            over = session.state.finished
            session.go(stood)
            what = name or "every output"
            self.write([[("", f"  {what} is what the reference says{'' if over else ', as far as the run goes'}")]])
            return
        step = self._maker(found.name, found.difference.index if found.difference else None)
        self.write(reasons.verdict(session, found, step, self.width())[:-1])
        if step is not None:
            session.go(step.cycle)
        self.show()

    def _maker(self, name: str, index: int | None) -> Step | None:
        return maker(self.session, name if index is None else f"{name}[{index}]", self.watch)

    def _seek(self, rest: str) -> None:
        word, _, after = rest.partition(" ")
        back = word == "back"
        text = after if back else rest
        wanted = condition(self.session, text)
        arrival = self.session.seek(wanted, back, self.watch)
        self._arrived(arrival, text)

    # ---------------------------------------------------------------------------------------------------------- alarms

    def _alarm(self, rest: str) -> None:
        number = self.session.set_alarm(rest)
        self.write([[("", f"  alarm {number}: {self.session.alarms[number].text}")]])

    def _alarms(self, rest: str) -> None:
        self._nothing(rest, "alarms")
        rows = [[("", f"  {n}  {made.text}")] for n, made in self.session.alarms.items()]
        self.write(list(rows) or [[("", "  none are set")]])

    def _silence(self, rest: str) -> None:
        if not re.fullmatch(r"\d{1,9}", rest):
            raise unclear(rest or "nothing", "the number of an alarm", "alarms")
        self.write([[("", f"  silent: {self.session.silence(int(rest)).text}")]])

    # --------------------------------------------------------------------------------------------------------- looking

    def _here(self, rest: str) -> None:
        self._nothing(rest, "here")
        self.write(view.here(self.session, self.width()))

    def _flight(self, rest: str) -> None:
        register = self.session.names.register(rest) if rest else None
        self.write(view.flight(self.session, register, self.width()))

    def _tell(self, rest: str) -> None:
        self.write(tell(self.session, rest, self.width()))

    def _why(self, rest: str) -> None:
        if not rest:
            raise unclear("nothing to explain", "a register, an element such as y[3], or stall", "why g6")
        if rest == "stall":
            found = stall_here(self.session, self.watch)
            nothing: list[Line] = [[("", "  no cycle has stalled up to here")]]
            self.write(reasons.stall(self.session, found, self.width()) if found else nothing)
            return
        origin = origin_of(self.session, rest, self.watch)
        self.write(reasons.why(self.session, origin, self.width()))

    def _uses(self, rest: str) -> None:
        session = self.session
        name, bracket, inner = rest.partition("[")
        if not bracket:
            if not rest:
                raise unclear("nothing to follow", "a register, or an element such as x[3]", "uses g6")
            if rest in session.names.arrays:
                raise unclear(f"{rest} is an array", "one element", f"uses {rest}[0]")
            register = session.names.register(rest)
            found = uses_of_register(session, register, self.watch)
            value = session.moment().registers[register]
            self.write(reasons.uses(session, session.layout.register(register), value, found, self.width()))
            return
        array = session.names.array(name.strip())
        first, _ = session.range_of(array, inner.rstrip("] "), None)
        size = array.element.bytes
        found = uses_of_bytes(session, array.start + first * size, size, self.watch)
        self.write(reasons.uses(session, f"{array.name}[{first}]", None, found, self.width()))

    def _judge(self, rest: str) -> None:
        session = self.session
        wanted = [session.output_named(rest)] if rest else None
        for judged in session.judge.verdicts(session.state, wanted):
            index = judged.difference.index if judged.difference else None
            step = self._maker(judged.name, index) if judged.difference else None
            self.write(reasons.verdict(session, judged, step, self.width()))

    def _draw(self, rest: str) -> None:
        self.write(draw(self.session, rest, self.width()))

    # --------------------------------------------------------------------------------------------------------- what if

    def _suppose(self, rest: str) -> None:
        text, _, form = rest.rpartition(" as ")
        changed = suppose(self.session, text or rest, form_named(form) if text else None)
        text = f"another course of time from here, with {changed} changed; forget returns"
        self.write(wrapped(text, self.width()))
        self.show()

    def _forget(self, rest: str) -> None:
        self._nothing(rest, "forget")
        self.session.forget()
        self.write([[("faint", "  back in the recorded run")]])
        self.show()

    # --------------------------------------------------------------------------------------------------------- scripts

    def _play(self, rest: str) -> None:
        if not rest:
            raise unclear("no file to play", "play FILE")
        path = Path(rest)
        if self._playing:  # a script is a stranger's file: it plays only what stands beside or below it
            folder = self._playing[-1].parent
            path = (folder / path).resolve()
            if not path.is_relative_to(folder):
                raise unclear(f"{rest} leads out of {folder}", "a file beside the script")
        self.play(path)

    def play(self, path: Path) -> None:
        """Follow the commands of a file, each shown behind the prompt it was given at.

        Raises ``Unclear`` at the first line that cannot be followed, with its number.
        """
        from vliwsim.faces.shell.view import prompt_text

        whole = path.resolve()
        if whole in self._playing:
            raise unclear(f"{path} plays itself", "scripts without a circle", name="script-circle")
        if len(self._playing) >= NESTED:
            raise unclear(f"{NESTED} scripts within each other", f"at most {NESTED}", name="script-circle")
        lines = read_script(path)
        self._playing.append(whole)
        try:
            for number, text in enumerate(lines, 1):
                if self.left or (self.watch and self.watch(self.session.cycle)):
                    break
                if not text.partition("#")[0].strip():
                    continue
                self.write([[("faint", prompt_text(self.session)), ("", text.strip())]])
                try:
                    self.follow(text)
                except Unclear as fault:
                    raise at_line(f"{path}:{number}", fault) from None
        finally:
            self._playing.pop()

    def _leave(self, rest: str) -> None:
        self._nothing(rest, "leave")
        self.left = True

    def _help(self, rest: str) -> None:
        operations = self.session.kernel.operations.by_name
        if rest in operations and rest not in COMMANDS:
            self.write([line for heading, text in manual(operations[rest]) for line in _page(heading, text)])
            return
        if rest:
            command = COMMANDS[named(rest)]
            lines: list[Line] = [[("", f"  {command.form}")], *wrapped(f"{command.says}.", self.width(), 4)]
            lines += wrapped(MORE[command.name], self.width(), 4) if command.name in MORE else []
            self.write([*lines, [("faint", f"    for example: {command.example}")]])
            return
        width = max(len(command.example) for command in COMMANDS.values())
        rows: list[Line] = [[("", f"  {c.example:<{width}}"), ("faint", f"  {c.says}")] for c in COMMANDS.values()]
        rows.append([("faint", "  Any beginning that fits one command will do. Alt-→ and Alt-← go a cycle.")])
        self.write(rows)


def _page(heading: str, text: str) -> list[Line]:
    """One heading of a manual page."""
    rows = text.splitlines()
    return [[("faint", f"  {heading if k == 0 else '':<10}"), ("", row)] for k, row in enumerate(rows)]


def named(word: str) -> str:
    """The command that a word or its beginning names; raises ``Unclear``, listing what it could be."""
    if word in COMMANDS:
        return word
    fitting = [name for name in COMMANDS if name.startswith(word)]
    if len(fitting) == 1:
        return fitting[0]
    if fitting:
        raise unclear(f"{word} could be {' or '.join(fitting)}", name="ambiguous-command")
    raise unclear(f"no command {word:.40}", listed_commands(), nearest(word, COMMANDS), name="no-such-command")


def listed_commands(names: Sequence[str] = tuple(COMMANDS)) -> str:
    return listed(names) if len(names) <= 12 else "help lists them"
