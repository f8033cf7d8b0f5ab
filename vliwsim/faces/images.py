"""``vliwsim assemble`` and ``vliwsim disassemble``: between sources and images."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import BinaryIO

import attrs
import click

from vliwsim.faces.options import core_options, load
from vliwsim.problems import ImageError, problem


@click.command(short_help="Assemble a kernel into an image.")
@click.argument("kernel")
@click.option(
    "-o", "--output", metavar="FILE", help="Write the image to this file; without it only say what it would be."
)
@click.option("--replace", is_flag=True, help="Let -o replace a file.")
@core_options
def assemble(kernel: str, output: str | None, replace: bool, core: str | None, changes: Sequence[str]) -> int:
    """Assemble KERNEL and write its image: the operation words, as they stand in code memory."""
    assembled = load(kernel, core, changes)
    from vliwsim.program.encoding.image import read_image, write_image

    image = read_image(assembled.image)
    if output is not None:
        write_image(output, image, replace)
    program = assembled.program
    size = f"{program.code_bytes} bytes, {len(image.words)} words of {image.bits} bits"
    beats = sum(section.beats for section in assembled.map.sections)
    click.echo(f"{assembled.name} on {assembled.core.name}: {size}, {beats} beats in {len(program.bundles)} bundles")
    for section in assembled.map.sections:
        click.echo(f"  {section.beats:>6}  {section.label}")
    for note in assembled.notes:
        click.echo(f"  note     {note.found} ({note.place})" if note.place else f"  note     {note.found}")
    if output is not None:
        click.echo(f"written to {output}")
    return 0


@click.command(short_help="Turn an image back into a source.")
@click.argument("image")
@core_options
@click.option("-o", "--output", metavar="FILE", help="Write the source to this file instead of the screen.")
@click.option("--replace", is_flag=True, help="Let -o replace a file.")
def disassemble(image: str, core: str | None, changes: Sequence[str], output: str | None, replace: bool) -> int:
    """Turn IMAGE back into a source that assembles to the very same words.

    The image names its core; --core says where to find it when that is not a shipped one.
    """
    from vliwsim.description.corefile import core_digest, core_names, load_core
    from vliwsim.description.tables import load_operations
    from vliwsim.program.disassembly import disassemble as source_of
    from vliwsim.program.encoding.decode import decode
    from vliwsim.program.encoding.image import read_image

    found = read_image(image)
    if core is None and found.core not in core_names():
        said, allowed = f"{image} is for a core {found.core!r}", f"a shipped core ({', '.join(core_names())})"
        raise ImageError(
            problem("unknown-core", said, allowed, "--core FILE")
        )  # a stranger's file names no file of ours
    chosen = load_core(core or found.core, tuple(changes))
    operations = load_operations(chosen.operations)
    try:
        program = decode(chosen, operations, found, core_digest(chosen, operations.digest) if found.digest else None)
    except ImageError as error:
        raise ImageError([attrs.evolve(p, found=f"{image}: {p.found}") for p in error.problems]) from None
    text = source_of(program)
    if output is None:
        click.echo(text, nl=False)
        return 0
    from vliwsim.kernel.files import write_whole

    write_whole(Path(output), lambda stream: _put(stream, text), replace=replace)
    click.echo(f"written to {output}")
    return 0


def _put(stream: BinaryIO, text: str) -> None:
    stream.write(text.encode())
