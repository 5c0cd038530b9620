"""What leaves the screen: settings to the clipboard and to a file, the retune sheet to a file."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING

from workbench import charts, study
from workbench.case.case import Case
from workbench.case.files import file_name
from workbench.case.tags import tag_words
from workbench.errors import InputError
from workbench.screens import drafts
from workbench.units import harmless

if TYPE_CHECKING:
    from textual.app import App


def has_clipboard(environment: Mapping[str, str]) -> bool:
    """Whether the terminal may be asked to take text into its clipboard (xterm's control OSC 52).

    A terminal that does not know the control shows it as text, and GNU screen keeps it to itself.
    """
    name = environment.get("TERM", "")
    return not name.startswith(("linux", "vt", "ansi", "dumb")) and not environment.get("STY")


def copy_settings(app: App[None], case: Case, path: Path) -> str:
    """The settings of the case to the clipboard and to a file; what happened, in words."""
    from workbench import report

    words = report.settings_block(case)
    place = drafts.folder().parent / "copied" / f"{harmless(path.stem, 60)}_settings.txt"
    try:
        place.parent.mkdir(parents=True, exist_ok=True, mode=0o700)
        _replace(place, words)
    except OSError as fault:
        written = f"settings not written to a file: {fault.strerror}"
    else:
        written = f"settings copied to {_short(place)}"
    if not has_clipboard(os.environ):
        return f"{written}; this terminal has no clipboard"
    app.copy_to_clipboard(words)
    return f"{written}; sent to the terminal's clipboard too"


def write_sheet(case: Case, path: Path) -> Path:
    """The retune sheet of the case beside its file; where it is.

    Raises `WorkbenchError` where there is nothing to tell, `OSError` where it cannot be written.
    """
    from workbench import report

    retune = study.retune(case)
    trend = charts.retune_rows(retune, report.SHEET_WIDTH, 14)
    words = report.sheet_text(
        retune,
        study.units_of(case),
        trend,
        file=str(path),
        tag_words=tag_words(case.loop.tag),
    )
    try:
        stem = file_name(case.loop.tag).removesuffix(".toml")
    except InputError:
        stem = path.stem
    place = path.with_name(f"{stem}_sheet.txt")
    _replace(place, words + "\n")
    return place


def _replace(place: Path, words: str) -> None:
    """The file with these words, whole or as it was.  Raises `OSError`."""
    new = place.with_name(f".{place.name}.{os.getpid()}.new")
    new.write_text(words, encoding="utf-8")
    new.replace(place)


def _short(place: Path) -> str:
    """A path as a shell takes it, from the user's own folder on."""
    home = str(Path.home())
    name = str(place)
    return harmless(f"~{name[len(home) :]}" if name.startswith(home + os.sep) else name, 200)
