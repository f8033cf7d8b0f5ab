"""The image: encoded words with what is needed to read them again, in memory and as a file.

The file, version 1:

1. the line ``vliwsim image 1``;
2. one line of JSON, keys sorted, no spaces, ASCII: ``bits`` of a word, ``core`` (its name), ``digest`` of the core and
   its operations, ``labels`` (name → byte address), ``words`` (how many), and where there are any ``targets`` (byte
   address of a branch's word, as text → the byte addresses that it names as places to go to, in order);
3. the words, ``bits / 8`` bytes each, least significant byte first;
4. 32 bytes: the SHA-256 of everything before.
"""

from __future__ import annotations

import hashlib
import json
import os
import re
from collections.abc import Mapping
from pathlib import Path

import attrs

from vliwsim.description.files import open_regular
from vliwsim.problems import ImageError, Problem, problem

MAGIC = b"vliwsim image 1\n"
MOST_BYTES = 1 << 25
"""The largest image file that is read, in bytes."""

_DIGEST_BYTES = 32
_NUMBER = re.compile(r"(?:0|[1-9][0-9]{0,9})\Z")
_LABEL = re.compile(r"[A-Za-z_]\w*\Z")


@attrs.frozen
class Image:
    """``words`` of ``bits`` bits for the core named ``core``; word i stands at byte ``i * bits / 8``.

    ``digest`` identifies the core and its operations (empty: unknown). ``labels``: name → byte address. ``targets``:
    byte address of a branch to a register → the byte addresses that it may go to, in order, where it names any.
    ``draft_bundles``: of a fresh encoding, for every draft the index of its first bundle in the decoded program.
    """

    core: str
    bits: int
    words: tuple[int, ...]
    labels: Mapping[str, int] = attrs.field(factory=dict)
    digest: str = ""
    targets: Mapping[int, tuple[int, ...]] = attrs.field(factory=dict)
    draft_bundles: tuple[int, ...] = attrs.field(default=(), eq=False, repr=False)

    @property
    def code_bytes(self) -> int:
        """Size of the code in bytes, padding included."""
        return len(self.words) * self.bits // 8


def to_bytes(image: Image) -> bytes:
    """The image as the bytes of an image file."""
    values: dict[str, object] = {
        "bits": image.bits,
        "core": image.core,
        "digest": image.digest,
        "labels": dict(image.labels),
        "words": len(image.words),
    }
    if image.targets:
        values["targets"] = {str(at): list(places) for at, places in image.targets.items()}
    header = _header(values)
    size = image.bits // 8
    body = MAGIC + header + b"\n" + b"".join([word.to_bytes(size, "little") for word in image.words])
    return body + hashlib.sha256(body).digest()


def from_bytes(data: bytes, name: str = "image") -> Image:
    """The image in the bytes of an image file; ``name`` is what messages call it.

    Raises :class:`ImageError` for anything :func:`to_bytes` has not made.
    """
    if not data.startswith(MAGIC):
        begins = data[:16].split(b"\n")[0].decode("ascii", "replace")
        raise ImageError(problem("not-an-image", f"{name} begins with {begins!r}", f"{MAGIC.decode().strip()!r}"))
    end = data.find(b"\n", len(MAGIC))
    if end < 0 or len(data) < end + 1 + _DIGEST_BYTES:
        raise ImageError(_damaged(name, f"{len(data)} bytes, cut off before the end"))
    body, digest = data[:-_DIGEST_BYTES], data[-_DIGEST_BYTES:]
    if hashlib.sha256(body).digest() != digest:
        raise ImageError(_damaged(name, "the checksum at the end does not match the bytes before it"))
    line = data[len(MAGIC) : end]
    try:
        header = json.loads(line)
        canonical = _header(header) == line
    except (ValueError, RecursionError, TypeError):
        raise ImageError(_damaged(name, "the second line is not JSON")) from None
    if not canonical:
        raise ImageError(_damaged(name, "the second line is not written as images have it"))
    faults = _header_faults(header)
    if faults:
        raise ImageError([_damaged(name, fault) for fault in faults])
    size, code = header["bits"] // 8, memoryview(body)[end + 1 :]
    if len(code) != size * header["words"]:
        raise ImageError(_damaged(name, f"{len(code)} bytes of code for {header['words']} words of {size} bytes"))
    words = tuple([int.from_bytes(code[k : k + size], "little") for k in range(0, len(code), size)])
    targets = {int(at): tuple(places) for at, places in header.get("targets", {}).items()}
    return Image(header["core"], header["bits"], words, header["labels"], header["digest"], targets)


def read_image(source: str | os.PathLike[str] | bytes) -> Image:
    """The image in a file, or in bytes; raises :class:`ImageError` when it cannot be read or is damaged."""
    if isinstance(source, bytes):
        return from_bytes(source)
    path = Path(source)
    try:
        with open_regular(path) as file:
            data = file.read(MOST_BYTES + 1)
    except (OSError, ValueError) as error:
        said = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
        raise ImageError(problem("unreadable", f"{path}: {said}", "an image file")) from None
    if len(data) > MOST_BYTES:
        raise ImageError(problem("not-an-image", f"{path} has more than {MOST_BYTES} bytes", f"at most {MOST_BYTES}"))
    return from_bytes(data, str(path))


def write_image(path: str | os.PathLike[str], image: Image, overwrite: bool = False) -> None:
    """Write the image file in one step: it is there complete, or as it was before.

    Raises :class:`ImageError` when the file exists and ``overwrite`` is not asked for, or it cannot be written.
    """
    import tempfile

    target = Path(path)
    data = to_bytes(image)
    try:
        handle, temporary = tempfile.mkstemp(prefix=f".{target.name[:40]}.", dir=target.parent)
        try:
            with os.fdopen(handle, "wb") as file:
                file.write(data)
            os.chmod(temporary, 0o666 & ~_umask())
            if overwrite:
                os.replace(temporary, target)
            else:
                _place_new(temporary, target)
        finally:
            Path(temporary).unlink(missing_ok=True)
    except FileExistsError:
        raise ImageError(
            problem("file-exists", f"{target} is there already", "a new file", "--replace, or another name")
        ) from None
    except (OSError, ValueError) as error:
        said = getattr(error, "strerror", None) or str(error)
        raise ImageError(problem("unwritable", f"{target}: {said}", "a file to write")) from None


def _place_new(temporary: str, target: Path) -> None:
    """Give the finished file its name, unless that is taken: a link, unlike a rename, fails then."""
    try:
        os.link(temporary, target)
    except FileExistsError:
        raise
    except OSError:  # a file system without links
        if target.exists():
            raise FileExistsError from None
        os.replace(temporary, target)


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask


def _header(values: Mapping[str, object]) -> bytes:
    return json.dumps(values, sort_keys=True, separators=(",", ":"), allow_nan=False).encode("ascii")


def _damaged(name: str, found: str) -> Problem:
    return problem("damaged-image", f"{name}: {found}", "an image as it was written", "assemble the source again")


def _header_faults(header: object) -> list[str]:
    """What is wrong with a header's content, one sentence each."""
    if not isinstance(header, dict) or set(header) - {"targets"} != {"bits", "core", "digest", "labels", "words"}:
        return ["the header must have exactly bits, core, digest, labels, words, and targets where there are any"]
    faults = []
    if type(header["bits"]) is not int or header["bits"] % 8 or not 32 <= header["bits"] <= 1024:
        faults.append("bits is no multiple of 8 from 32 to 1024")
    if type(header["words"]) is not int or header["words"] < 0:
        faults.append("words is no count")
    faults += [f"{key} is no text" for key in ("core", "digest") if not isinstance(header[key], str)]
    labels = header["labels"]
    if not isinstance(labels, dict):
        faults.append("labels is no table")
    elif not all(_LABEL.match(key) and type(at) is int and at >= 0 for key, at in labels.items()):
        faults.append("labels does not map names to byte addresses")
    if "targets" in header and not _are_targets(header["targets"]):
        faults.append("targets does not map byte addresses to byte addresses in order")
    return faults


def _are_targets(targets: object) -> bool:
    return (
        isinstance(targets, dict)
        and bool(targets)
        and all(_NUMBER.match(at) for at in targets)
        and all(isinstance(places, list) and places for places in targets.values())
        and all(type(place) is int and place >= 0 for places in targets.values() for place in places)
        and all(places == sorted(set(places)) for places in targets.values())
    )
