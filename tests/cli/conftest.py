from __future__ import annotations

import io
import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import pytest

from nightfold_cli.main import main
from nightfold_cli.render import Screen


@dataclass(frozen=True)
class Answer:
    code: int
    out: str
    err: str


Run = Callable[..., Answer]


@pytest.fixture(scope="session")
def heron(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder with two nights of heron and a store `heron.sqlite` that holds them."""
    from nightfold.opening import create_store
    from nightfold.simulator import write_campaign

    folder = tmp_path_factory.mktemp("heron")
    campaign = write_campaign(folder, nights=2)
    with create_store(folder / "heron.sqlite") as store:
        store.use_card(campaign.card)
        for path in campaign.files:
            store.take_file(path)
    return folder


@pytest.fixture
def at_home(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder, with no settings from outside."""
    monkeypatch.chdir(tmp_path)
    for name in ("NIGHTFOLD_STORE", "COLUMNS", "NO_COLOR"):
        monkeypatch.delenv(name, raising=False)
    return tmp_path


@pytest.fixture
def run(at_home: Path, capsys: pytest.CaptureFixture[str]) -> Run:
    """Return a function that runs the command line in this process, piped."""

    def run_command(*arguments: str | Path) -> Answer:
        code = main([str(argument) for argument in arguments])
        captured = capsys.readouterr()
        return Answer(code, captured.out, captured.err)

    return run_command


@pytest.fixture
def on_screen(at_home: Path, monkeypatch: pytest.MonkeyPatch) -> Callable[..., str]:
    """Return a function that runs a command as on a terminal of a given width, without colour."""

    def run_command(*arguments: str | Path, width: int = 80) -> str:
        out = io.StringIO()
        monkeypatch.setenv("NO_COLOR", "1")
        monkeypatch.setattr(
            Screen, "here", classmethod(lambda cls, json: cls(out, sys.stderr, "terminal", width))
        )
        assert main([str(argument) for argument in arguments]) == 0
        return "\n".join(line.rstrip() for line in _without_styles(out.getvalue()).split("\n"))

    return run_command


def _without_styles(text: str) -> str:
    """Return the text without escape sequences that only set bold or dim."""
    import re

    return re.sub(r"\x1b\[[0-9;]*m", "", text)


@pytest.fixture
def in_a_process(at_home: Path) -> Run:
    """Return a function that runs the command line in a process of its own."""

    def run_command(*arguments: str | Path, **environment: str) -> Answer:
        done = subprocess.run(
            [sys.executable, "-m", "nightfold_cli.main", *map(str, arguments)],
            capture_output=True,
            text=True,
            env={**os.environ, **environment},
            timeout=60,
        )
        return Answer(done.returncode, done.stdout, done.stderr)

    return run_command
