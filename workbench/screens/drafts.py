"""Unsaved work, kept where a dropped line cannot take it.

A draft is the list of settings that differ from the case file, in the file's own words.  It is
written at each accepted change, offered when the case is opened again, and removed once the work
is saved.  Each session on a case writes a draft of its own, and that of a session which is still
running is left to it.  Writing uses plain data only, because a signal handler may have to do it.
"""

from __future__ import annotations

import contextlib
import glob
import hashlib
import json
import os
import threading
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

from workbench.units import harmless

LARGEST = 1_000_000
"""Bytes above which a draft is not ours."""


@dataclass(frozen=True)
class Draft:
    """What was kept."""

    path: Path
    """The draft itself."""
    at: str
    """When it was last written."""
    base: str
    """SHA-256 of the case file that it changes."""
    changes: Mapping[str, str]
    """Key of the case file -> text."""


def folder() -> Path:
    """Where drafts are kept."""
    state = os.environ.get("XDG_STATE_HOME", "")
    # The specification asks that a relative path be passed over.
    root = Path(state) if os.path.isabs(state) else Path.home() / ".local" / "state"
    return root / "workbench" / "drafts"


def place(case_path: Path) -> Path:
    """Where this session keeps the draft of this case."""
    return folder() / f"{_stem(case_path)}-{os.getpid()}.json"


def _stem(case_path: Path) -> str:
    """What the drafts of one case share."""
    whole = os.path.abspath(case_path)
    name = hashlib.sha256(whole.encode("utf-8", "surrogateescape")).hexdigest()[:12]
    return f"{case_path.stem[:40]}-{name}"


def find(case_path: Path) -> Draft | None:
    """The newest draft that an ended session left of this case, or nothing."""
    found: list[tuple[float, Draft]] = []
    for path in folder().glob(f"{glob.escape(_stem(case_path))}-*.json"):
        try:
            if path.stat().st_size > LARGEST:
                continue
            kept = json.loads(path.read_text(encoding="utf-8"))
            changes = {str(key): str(text) for key, text in kept["changes"].items()}
            draft = Draft(path, harmless(str(kept["at"]), 40), str(kept["base"]), changes)
            if not _is_at_work(path, kept):
                found.append((path.stat().st_mtime, draft))
        except (OSError, ValueError, KeyError, AttributeError, TypeError, RecursionError):
            continue
    return max(found, key=lambda each: each[0])[1] if found else None


def _is_at_work(path: Path, kept: Mapping[str, object]) -> bool:
    """Whether another session on this machine is still writing the draft."""
    number = int(path.stem.rpartition("-")[2])
    if number == os.getpid() or kept.get("host") != os.uname().nodename:
        return False
    # A number is given out again; the same number and the same start are the same process.
    return kept.get("started") == _started(number) != ""


def _started(number: int) -> str:
    """When a process began, in the system's own count; nothing where there is none of the number.

    Where the system does not tell, a process that is there is taken for the same one.
    """
    try:
        os.kill(number, 0)
    except PermissionError:
        pass
    except OSError:
        return ""
    try:
        # The second field is a name in brackets, which may hold anything.
        status = Path(f"/proc/{number}/stat").read_text(encoding="utf-8", errors="replace")
        return status.rpartition(")")[2].split()[19]
    except (OSError, IndexError):
        return "not told"


class Keeper:
    """Writes the draft of one case."""

    def __init__(self, case_path: Path) -> None:
        self.path = place(case_path)
        self.case_path = case_path
        self._wanted: str | None = None
        self._written: str | None = None
        self._replaced: Path | None = None
        self._session = {"host": os.uname().nodename, "started": _started(os.getpid())}
        # Reentrant: a signal handler runs in the thread that may be writing.
        self._lock = threading.RLock()

    def hold(self, at: str, base: str, changes: Mapping[str, str]) -> None:
        """Take note of the unsaved work; `write` puts it on disk."""
        kept = {"case": os.path.abspath(self.case_path), "at": at, "base": base, **self._session}
        text = json.dumps({**kept, "changes": dict(changes)}, indent=1) + "\n"
        self._wanted = text if changes else None

    def replaces(self, draft: Draft) -> None:
        """The work of an earlier session goes on here: its draft goes once ours is on disk."""
        if draft.path != self.path:
            self._replaced = draft.path

    def write(self) -> None:
        """Bring the disk up to date.  Raises `OSError` where that cannot be done."""
        with self._lock:
            wanted = self._wanted
            if wanted == self._written:
                return
            if wanted is None:
                self.path.unlink(missing_ok=True)
            else:
                if self._written is None:
                    self.path.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
                new = self.path.with_suffix(f".{os.getpid()}.{threading.get_ident()}.new")
                # Not synchronised with the disk: it outlives this program, which is what it is
                # for, and a slow disk must not hold up the keys.
                new.write_text(wanted, encoding="utf-8")
                new.replace(self.path)
            self._written = wanted
            if self._replaced is not None:
                self._replaced.unlink(missing_ok=True)
                self._replaced = None

    def write_last(self) -> None:
        """As the program is being ended from outside: nobody is left to be told of a fault."""
        with contextlib.suppress(OSError):
            self.write()
