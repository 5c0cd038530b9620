"""The hook that README shows keeps an unsound case file out of a repository."""

from __future__ import annotations

import os
import re
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Final

import pytest

ROOT: Final = Path(__file__).resolve().parents[2]


def git(folder: Path, *words: str) -> subprocess.CompletedProcess[str]:
    program = folder.parent / "bin"
    environment = {
        **os.environ,
        "PYTHONPATH": str(ROOT),
        "PATH": f"{program}{os.pathsep}{os.environ['PATH']}",
        "GIT_CONFIG_GLOBAL": os.devnull,
    }
    own = ("-c", "user.name=mk", "-c", "user.email=mk@example.invalid")
    return subprocess.run(
        ["git", *own, *words],
        cwd=folder,
        env=environment,
        capture_output=True,
        text=True,
        timeout=60,
        check=False,
    )


@pytest.mark.skipif(shutil.which("git") is None, reason="git is not installed")
def test_the_hook_lets_sound_files_pass_and_stops_others(tmp_path: Path) -> None:
    folder = tmp_path / "loops"
    (tmp_path / "bin").mkdir()
    folder.mkdir()
    program = tmp_path / "bin" / "workbench"
    program.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m workbench "$@"\n')
    program.chmod(0o755)
    git(folder, "init", "--quiet")
    shown = re.search(
        r"<!-- hook -->\n```shell\n(.*?)```", (ROOT / "README.md").read_text(), re.DOTALL
    )
    assert shown is not None
    hook = folder / ".git" / "hooks" / "pre-commit"
    hook.parent.mkdir(exist_ok=True)
    hook.write_text(shown[1])
    hook.chmod(0o755)

    case = folder / "a loop.toml"
    case.write_text('format = 1\n[loop]\ntag = "TIC-1"\n')
    git(folder, "add", ".")
    passed = git(folder, "commit", "--quiet", "-m", "sound")
    case.write_text('format = 1\n[loop]\ntga = "TIC-1"\n')
    git(folder, "add", ".")
    stopped = git(folder, "commit", "--quiet", "-m", "not sound")

    assert passed.returncode == 0, passed.stderr
    assert stopped.returncode != 0
    assert "did you mean 'loop.tag'?" in stopped.stdout + stopped.stderr
