"""Case files on disk: reading one with every fault at once, and saving one safely.

The new text (`writing.py`) is read back and compared with the case before it replaces the old
file, which it does in one step, under a lock, and only if the file on disk is still the one that
was read.
"""

from __future__ import annotations

import contextlib
import errno
import fcntl
import hashlib
import math
import os
import re
import secrets
import stat
import time
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import Any, Final

from workbench.case.case import Case, differences, edit_all
from workbench.case.layout import Layout, read_layout
from workbench.case.reading import MOST_FAULTS, read_tables
from workbench.case.writing import BYTE_ORDER_MARK, FORMAT, changed_text, format_case
from workbench.errors import CaseFileError, InputError, Problem
from workbench.units import Note, harmless, shown

LARGEST: Final = 1_000_000
"""Bytes of a case file; a loop's whole life fits, and nothing larger is parsed."""

DEEPEST: Final = 20
"""Brackets inside brackets, before the text goes to a parser that calls itself for each."""

MOST_PARTS: Final = 10
"""Names in one dotted key."""

LONGEST_KEY: Final = 200
"""Characters in one key."""

LOCK_WAIT_S: Final = 5.0
"""How long a save waits for another one in the same folder [s]."""


@dataclass(frozen=True)
class CaseFile:
    """A case and the file it was read from, byte for byte."""

    case: Case
    path: str
    """As the engineer named it."""
    raw: bytes
    """What the file held when it was read or saved."""
    notes: tuple[Note, ...] = ()
    """Remarks on what the last save did beside the settings."""

    @property
    def text(self) -> str:
        """The file as text, byte order mark included."""
        return self.raw.decode("utf-8")

    @property
    def sha256(self) -> str:
        """SHA-256 of the file."""
        return hashlib.sha256(self.raw).hexdigest()


# --- reading -------------------------------------------------------------------------------------


def read_case(path: str | os.PathLike[str]) -> CaseFile:
    """The case in a file.

    Raises `CaseFileError` with every fault: its key, line, what is wrong, what would mend it.
    """
    name = os.fspath(path)
    try:
        raw = _contents(name)
        case = parse_case(_decoded(raw))
        return CaseFile(replace(case, folder=os.path.dirname(name)), name, raw)
    except CaseFileError as fault:
        raise fault.at(path=harmless(name)) from None


def parse_case(text: str, path: str = "") -> Case:
    """The case in the text of a case file.  Raises `CaseFileError` with every fault."""
    try:
        return _parsed(text.removeprefix(BYTE_ORDER_MARK))
    except CaseFileError as fault:
        raise fault.at(path=path) from None


def file_name(tag: str) -> str:
    """The name of a new loop's file, `TAG.toml`.

    Raises `InputError` for a tag that cannot be a file's name.
    """
    if re.search(r"[/\\\x00]", tag) or not tag.isprintable() or tag.strip(" .") != tag or not tag:
        what = f"{harmless(tag, 60)!r} cannot be a file's name"
        raise InputError(Problem(what, "use letters, digits, - and _", "loop.tag"))
    return f"{tag}.toml"


def files_below(folder: str | os.PathLike[str]) -> list[Path]:
    """Every case file in a folder and below it.

    Raises `InputError` where there is none, `OSError` where a folder cannot be looked into.
    """

    def stop(fault: OSError) -> None:
        raise fault

    below = sorted(
        Path(inner, name)
        for inner, _, names in os.walk(folder, onerror=stop)
        for name in names
        if name.endswith(".toml")
    )
    if not below:
        what, mend = "has no case file (*.toml) in or below it", "name another"
        raise InputError(Problem(what, mend, path=harmless(os.fspath(folder))))
    return below


def _contents(path: str) -> bytes:
    """The bytes of a regular file that is not too large."""
    try:
        mode = os.stat(path).st_mode
        if stat.S_ISDIR(mode):
            raise _unreadable("is a folder", "name a case file in it")
        if not stat.S_ISREG(mode):
            raise _unreadable("is not a regular file", "name a case file")
        with open(path, "rb") as file:
            raw = file.read(LARGEST + 1)
    except FileNotFoundError:
        mend = "check the name, or make a case with `workbench new TAG`"
        raise _unreadable("there is no such file", mend) from None
    except PermissionError:
        raise _unreadable("may not be read by you", "ask for the right to read it") from None
    except (OSError, ValueError) as fault:
        raise _unreadable(f"cannot be read: {_reason(fault)}", "check the name") from None
    if len(raw) > LARGEST:
        what = f"is larger than {LARGEST // 1000} kB"
        raise _unreadable(what, "a case file is much smaller; check the name")
    return raw


def _unreadable(what: str, mend: str, line: int | None = None) -> CaseFileError:
    return CaseFileError(Problem(what, mend, line=line))


def _reason(fault: Exception) -> str:
    text = fault.strerror if isinstance(fault, OSError) else str(fault)
    return (text or type(fault).__name__).lower()


def _decoded(raw: bytes) -> str:
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError as fault:
        line = raw.count(b"\n", 0, fault.start) + 1
        what = f"byte {raw[fault.start]:#04x} is not UTF-8"
        raise _unreadable(what, "save the file as UTF-8", line) from None


def _parsed(text: str) -> Case:
    layout = read_layout(text)
    _check_size(layout)
    try:
        raw = tomllib.loads(text)
    except ValueError as fault:
        raise _not_toml(str(fault), text) from None
    faults = _format_faults(raw, layout)
    case, found = read_tables(raw)
    lines = _Lines(layout)
    faults += [replace(each, line=lines.of(each.key)) for each in found]
    if faults or case is None:
        faults.sort(key=lambda each: each.line or math.inf)
        if len(faults) > MOST_FAULTS:
            more = Problem("has more faults than are listed", "mend these first")
            faults = [*faults[:MOST_FAULTS], more]
        raise CaseFileError(faults)
    return case


def _check_size(layout: Layout) -> None:
    """Refuses what makes a parser recurse or crawl."""
    if len(layout.text.encode("utf-8", "replace")) > LARGEST:
        raise _unreadable(f"is larger than {LARGEST // 1000} kB", "a case file is much smaller")
    for (count, line), most, what in (
        (layout.deepest, DEEPEST, "brackets are nested"),
        (layout.longest_name, LONGEST_KEY, "a key has"),
        (layout.longest_key, MOST_PARTS, "a key has"),
    ):
        if count > most:
            unit = {DEEPEST: "deep", LONGEST_KEY: "characters", MOST_PARTS: "parts"}[most]
            raise _unreadable(f"{what} {count} {unit}", f"at most {most} are accepted", line)


def _format_faults(raw: dict[str, Any], layout: Layout) -> list[Problem]:
    """Takes `format` out of the raw tables; a newer format is refused before all else."""
    line = layout.line("format")
    if "format" not in raw:
        mend = f"write format = {FORMAT} as the first line"
        return [Problem("is missing", mend, "format", 1)]
    given = raw.pop("format")
    if type(given) is int and given > FORMAT:
        what = f"{shown(given)} is newer than the format {FORMAT} that this program reads"
        raise CaseFileError(Problem(what, "use a newer Loop Workbench", "format", line))
    if type(given) is not int or given != FORMAT:
        what = f"must be {FORMAT}, not {shown(given)}"
        return [Problem(what, f"write format = {FORMAT}", "format", line)]
    return []


class _Lines:
    """Finds the lines of the keys that faults name."""

    def __init__(self, layout: Layout) -> None:
        self._layout = layout

    def of(self, key: str) -> int | None:
        """The line of a dotted key; `history[2].gain` is the gain of the second entry."""
        numbered = re.fullmatch(r"(history|plant\.block)\[(\d+)\](?:\.(.+))?", key)
        if numbered:
            path = [*numbered[1].split("."), int(numbered[2]) - 1]
            rest = numbered[3]
        else:
            table, _, rest = key.partition(".")
            path = [table]
        if rest:
            path.append(rest)
        if self._layout.setting(*path) is None and key in self._as_told:
            return self._as_told[key]
        return self._layout.line(*path)

    @cached_property
    def _as_told(self) -> dict[str, int]:
        """Lines of keys by the spelling that faults give to unknown ones."""
        lines: dict[str, int] = {}
        for each in self._layout.statements:
            if each.value is not None:
                lines.setdefault(harmless(".".join(map(str, each.path)), 60), each.line)
        return lines


def _not_toml(message: str, text: str) -> CaseFileError:
    """The parser's words with the line, and what usually mends it."""
    place = re.search(r" \(at (?:line (\d+), column (\d+)|end of document)\)$", message)
    what = message[: place.start()] if place else message
    last = text.count("\n") + (not text.endswith("\n"))
    line = int(place[1]) if place and place[1] else last
    column = f", column {place[2]}" if place and place[2] else ""
    mend = next((mend for start, mend in _MENDS if what.startswith(start)), "mend this line")
    what = harmless(what[:1].lower() + what[1:], 100)
    return _unreadable(f"is not TOML{column}: {what}", mend, max(line, 1))


_VALUE_MEND: Final = 'write text and times in quotes ("40 s"), numbers with a decimal point'
_MENDS: Final = (
    ("Invalid value", _VALUE_MEND),
    ("Expected newline", _VALUE_MEND),
    ("Cannot overwrite", "write each key once"),
    ("Cannot declare", "write each table once"),
    ("Cannot mutate", "write each table once"),
    ("Expected '='", "write key = value"),
    ("Invalid initial character", "write key = value, one on each line"),
    ("Unclosed array", "close the list with ]"),
    ("Unterminated string", "close the quotes"),
    ("Illegal character", "take the character out, or close the quotes before it"),
    ("Exceeds the limit", "write a shorter number"),
)
"""Starts of the parser's messages and what usually mends them."""

# --- the file on disk ----------------------------------------------------------------------------


def save_case(file: CaseFile, case: Case) -> CaseFile:
    """The case saved into the file it was read from, changing only the lines that must change.

    Raises `InputError` where the file on disk is no longer the one that was read (the message says
    what differs), and where it cannot be written; the old file is then whole.
    """
    try:
        text, notes = changed_text(file.text, file.case, case)
        raw = _proved(text, case)
        target = os.path.realpath(file.path)
        with _folder(target) as folder:
            now = _still_there(target)
            if now != file.raw:
                raise _changed_meanwhile(file, now)
            if raw != file.raw:
                before = os.stat(target)
                _replace(folder, target, raw)
                notes = (*notes, *_owner_notes(target, before))
    except (OSError, ValueError) as fault:
        raise _unsaved(fault, file.path) from None
    except InputError as fault:
        raise fault.at(path=harmless(file.path)) from None
    return CaseFile(case, file.path, raw, notes)


def write_new(path: str | os.PathLike[str], case: Case) -> CaseFile:
    """The case in a new file.

    Raises `InputError` where there is a file of that name already, or it cannot be written.
    """
    name = os.fspath(path)
    try:
        raw = _proved(format_case(case), case)
        target = os.path.abspath(name)
        with _folder(target) as folder:
            _create(folder, os.path.basename(target), raw)
    except FileExistsError:
        what, mend = "there is already such a file", "choose another name, or open that one"
        raise InputError(Problem(what, mend, path=harmless(name))) from None
    except (OSError, ValueError) as fault:
        raise _unsaved(fault, name) from None
    except InputError as fault:
        raise fault.at(path=harmless(name)) from None
    return CaseFile(case, name, raw)


def changed_on_disk(file: CaseFile) -> list[tuple[str, str, str]] | None:
    """What someone else changed in the file since it was read: key, value then, value now.

    `None` where the file is the same; an empty list where only comments or layout differ.
    Raises `CaseFileError` where it can no longer be read.
    """
    now = read_case(file.path)
    return None if now.raw == file.raw else differences(file.case, now.case)


@dataclass(frozen=True)
class Merge:
    """What one person has and what another saved meanwhile, put together key by key."""

    file: CaseFile
    """The file as the other person left it."""
    case: Case
    """Theirs, with one's own changes over it."""
    theirs: tuple[tuple[str, str, str], ...]
    """What they changed: key, value then, value now."""
    both: tuple[str, ...]
    """Keys that both changed, to different values; one's own are kept."""


def merge(file: CaseFile, case: Case) -> Merge:
    """One's own changes to a case, put over what someone else saved in its file.

    Raises `InputError` where the file can no longer be read, or the two do not go together.
    """
    now = read_case(file.path)
    own = [change for change in differences(file.case, case) if change[0] != "history"]
    theirs = differences(file.case, now.case)
    found = {key: value for key, _, value in theirs}
    both = tuple(key for key, _, value in own if key in found and found[key] != value)
    # A controller taken out is one change; everything else is a key with its text.
    removed = any(key == "controller" for key, _, _ in own)
    keys = {key: value for key, _, value in own if key != "controller"}
    merged = edit_all(now.case, keys) if keys else now.case
    if removed:
        merged = replace(merged, controller=None)
    return Merge(now, merged, tuple(theirs), both)


def _proved(text: str, case: Case) -> bytes:
    """The bytes of a text that reads back as the case."""
    try:
        raw = text.encode("utf-8")
        if len(raw) > LARGEST:
            mend = "start a new file and keep this one as its past"
            raise InputError(Problem(f"would be larger than {LARGEST // 1000} kB", mend))
        if parse_case(text) == case:
            return raw
        what = "would not read back as the same case"
    except CaseFileError as fault:
        what = f"would not read back: {replace(fault.problems[0], line=None)}"
    except UnicodeEncodeError:
        what = "has a character that UTF-8 cannot hold"
    raise InputError(Problem(what, "nothing was saved; change the setting it is about"))


@dataclass(frozen=True)
class _Folder:
    """A folder held open and, where its disk can, locked against other saves."""

    handle: int
    alone: bool
    """Whether no other save can be at work in the folder."""


@contextlib.contextmanager
def _folder(target: str) -> Iterator[_Folder]:
    handle = os.open(os.path.dirname(target), os.O_RDONLY | os.O_DIRECTORY | os.O_CLOEXEC)
    try:
        try:
            _lock(handle)
            yield _Folder(handle, True)
        except _CannotLock:
            # Some network disks lock files, but no folders.
            with _locked_file(target):
                yield _Folder(handle, False)
    finally:
        os.close(handle)


class _CannotLock(Exception):
    """The disk has no locks for this."""


@contextlib.contextmanager
def _locked_file(target: str) -> Iterator[None]:
    try:
        handle = os.open(target, os.O_RDWR | os.O_CLOEXEC)
    except OSError:
        # Nothing to lock: a new file, whose creation is refused if another comes first.
        yield
        return
    try:
        with contextlib.suppress(_CannotLock):
            _lock(handle)
        yield
    finally:
        os.close(handle)


def _lock(handle: int) -> None:
    """Waits for the lock; it goes with the handle, or with the process."""
    deadline = time.monotonic() + LOCK_WAIT_S
    while True:
        try:
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            return
        except BlockingIOError:
            if time.monotonic() > deadline:
                what = "another program has been saving in this folder for a while"
                raise InputError(Problem(what, "nothing was saved; try again")) from None
            time.sleep(0.01)
        except OSError as fault:
            raise _CannotLock from fault


def _still_there(target: str) -> bytes:
    try:
        now = _contents(target)
    except CaseFileError as fault:
        what = f"{fault.problems[0].what} any more"
        mend = "nothing was saved; put it back, or save under another name"
        raise InputError(Problem(what, mend)) from None
    if not os.access(target, os.W_OK):
        raise InputError(Problem("is read-only", "nothing was saved; save under another name"))
    return now


def _changed_meanwhile(file: CaseFile, now: bytes) -> InputError:
    try:
        found = differences(file.case, parse_case(_decoded(now)))
    except CaseFileError:
        what = "was changed by someone else since it was read, and is no longer a sound case file"
    else:
        told = [f"{k} is now {new or 'left out'}, was {old or 'left out'}" for k, old, new in found]
        listed = ", ".join(told[:3]) + (f" and {len(told) - 3} more" if len(told) > 3 else "")
        listed = harmless(listed, 300) or "only its comments or layout differ"
        what = f"was changed by someone else since it was read: {listed}"
    return InputError(Problem(what, "nothing was saved; read it again, or save under another name"))


_TEMPORARY: Final = re.compile(r"\.workbench-[0-9a-f]{8}\.saving")


def _temporary(folder: _Folder, raw: bytes, mode: int, like: os.stat_result | None = None) -> str:
    """A neighbour that holds the bytes, on the disk for certain."""
    if folder.alone:
        # Left by a save that was killed: no other save can be using it now.
        for name in os.listdir(folder.handle):
            if _TEMPORARY.fullmatch(name):
                with contextlib.suppress(OSError):
                    os.unlink(name, dir_fd=folder.handle)
    name = f".workbench-{secrets.token_hex(4)}.saving"
    flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC
    handle = os.open(name, flags, mode, dir_fd=folder.handle)
    with contextlib.ExitStack() as unless_done:
        unless_done.callback(os.unlink, name, dir_fd=folder.handle)
        with open(handle, "wb") as file:
            if like is not None:
                _made_like(handle, like)
            file.write(raw)
            file.flush()
            os.fsync(handle)
        unless_done.pop_all()
    return name


def _made_like(handle: int, like: os.stat_result) -> None:
    """Gives a new file the owner and group, where that is allowed, and the mode of the old one."""
    own = os.fstat(handle)
    if (own.st_uid, own.st_gid) != (like.st_uid, like.st_gid):
        try:
            os.fchown(handle, like.st_uid, like.st_gid)
        except OSError:
            # Whoever may not give a file away may still leave it to a group of their own.
            with contextlib.suppress(OSError):
                os.fchown(handle, -1, like.st_gid)
    os.fchmod(handle, stat.S_IMODE(like.st_mode))


def _owner_notes(target: str, before: os.stat_result) -> tuple[Note, ...]:
    """What a save could not keep."""
    now = os.stat(target)
    lost = [
        word
        for word, name in (("owner", "st_uid"), ("group", "st_gid"))
        if getattr(now, name) != getattr(before, name)
    ]
    if not lost:
        return ()
    return (Note("caution", f"the file's {' and '.join(lost)} could not be kept: it is yours now"),)


def _replace(folder: _Folder, target: str, raw: bytes) -> None:
    temporary, at = _temporary(folder, raw, 0o600, os.stat(target)), folder.handle
    with contextlib.ExitStack() as unless_done:
        unless_done.callback(os.unlink, temporary, dir_fd=at)
        os.replace(temporary, os.path.basename(target), src_dir_fd=at, dst_dir_fd=at)
        unless_done.pop_all()
    os.fsync(folder.handle)


def _create(folder: _Folder, name: str, raw: bytes) -> None:
    temporary, at = _temporary(folder, raw, 0o666), folder.handle
    try:
        try:
            os.link(temporary, name, src_dir_fd=at, dst_dir_fd=at)
        except OSError as fault:
            if fault.errno not in (errno.EPERM, errno.EOPNOTSUPP, errno.ENOSYS):
                raise
            # A disk without links: the name is taken first, then filled.
            flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC
            os.close(os.open(name, flags, 0o666, dir_fd=folder.handle))
            os.replace(temporary, name, src_dir_fd=at, dst_dir_fd=at)
    finally:
        with contextlib.suppress(FileNotFoundError):
            os.unlink(temporary, dir_fd=folder.handle)
    os.fsync(folder.handle)


def _unsaved(fault: OSError | ValueError, path: str) -> InputError:
    number = fault.errno if isinstance(fault, OSError) else None
    what, mend = {
        errno.ENOSPC: ("the disk is full", "free some space"),
        errno.EDQUOT: ("your share of the disk is full", "free some space"),
        errno.ENOENT: ("its folder is not there", "make the folder, or choose another"),
        errno.ENOTDIR: ("its folder is not a folder", "choose another place"),
        errno.EACCES: ("you may not write in its folder", "choose another place"),
        errno.EPERM: ("you may not write there", "choose another place"),
        errno.EROFS: ("its disk is read-only", "choose another place"),
    }.get(number or 0, (f"it cannot be written: {_reason(fault)}", "choose another place"))
    return InputError(Problem(what, f"nothing was saved; {mend}", path=harmless(path)))
