"""Unsaved work, kept where a dropped line cannot take it.

A draft is the list of settings that differ from the case file, in the file's own words.  It is
written at each accepted change, offered when the case is opened again, and removed once the work
is saved.  Writing uses plain data only, because a signal handler may have to do it.
"""

from __future__ import annotations

import contextlib
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
    """Where the draft of this case is kept."""
    whole = os.path.abspath(case_path)
    name = hashlib.sha256(whole.encode("utf-8", "surrogateescape")).hexdigest()[:12]
    return folder() / f"{case_path.stem[:40]}-{name}.json"


def find(case_path: Path) -> Draft | None:
    """The draft of this case, or nothing where there is none that can be read."""
    path = place(case_path)
    try:
        if path.stat().st_size > LARGEST:
            return None
        kept = json.loads(path.read_text(encoding="utf-8"))
        changes = {str(key): str(text) for key, text in kept["changes"].items()}
        return Draft(path, harmless(str(kept["at"]), 40), str(kept["base"]), changes)
    except (OSError, ValueError, KeyError, AttributeError, TypeError, RecursionError):
        return None


class Keeper:
    """Writes the draft of one case."""

    def __init__(self, case_path: Path) -> None:
        self.path = place(case_path)
        self.case_path = case_path
        self._wanted: str | None = None
        self._written: str | None = None
        # Reentrant: a signal handler runs in the thread that may be writing.
        self._lock = threading.RLock()

    def hold(self, at: str, base: str, changes: Mapping[str, str]) -> None:
        """Take note of the unsaved work; `write` puts it on disk."""
        kept = {"case": os.path.abspath(self.case_path), "at": at, "base": base}
        text = json.dumps({**kept, "changes": dict(changes)}, indent=1) + "\n"
        self._wanted = text if changes else None

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

    def write_last(self) -> None:
        """As the program is being ended from outside: nobody is left to be told of a fault."""
        with contextlib.suppress(OSError):
            self.write()
