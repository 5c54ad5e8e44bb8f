"""Completion: what is offered at each place, in the shells themselves, at once and without a complaint."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

from nightfold.fits.models import MODEL_NAMES
from nightfold_cli.completing import FILES, offers
from nightfold_cli.overview import names


@pytest.fixture(autouse=True)
def where(heron: Path, at_home: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("NIGHTFOLD_STORE", str(heron / "heron.sqlite"))
    return heron / "heron.sqlite"


def offered(*words: str) -> list[str]:
    return [word for word, _ in offers(words)]


def test_commands() -> None:
    assert set(offered("")) == {*names(), "help"}
    assert offered("sca") == ["scans", "scan"]
    assert offered("help", "sequ") == ["sequence"]
    assert offered("--st") == ["--store"]
    assert offered("--json", "exp") == ["export"]
    assert offered("nonsense", "") == []
    assert all(said for _, said in offers([""]))


@pytest.mark.parametrize("command", names())
def test_every_command_offers_its_options(command: str) -> None:
    found = offered(command, "--")
    assert {"--help", "--store", "--json"} <= set(found)
    assert "--complete" not in found


def test_scans() -> None:
    assert {"loss-coarse", "slosh-y", "lifetime"} <= set(offered("scan", ""))
    assert offered("fit", "loss-c") == ["loss-coarse"]
    assert offered("fit", "loss-coarse#") == ["loss-coarse#1"]
    assert "1" in offered("fit", "1")
    assert offered("note", "text", "--scan", "slo") == ["slosh-y"]
    assert offered("join", "loss-coarse", "slo") == ["slosh-y"]
    assert offered("fit", "--again", "slo") == ["slosh-y"]


def test_models_and_choices() -> None:
    assert offered("fit", "loss-coarse", "") == list(MODEL_NAMES)
    assert offered("fit", "loss-coarse", "lorentzian", "gauss") == ["gaussian"]
    assert offered("models", "gauss") == ["gaussian"]
    assert offered("fit", "x", "lorentzian", "--background", "") == ["none", "flat", "sloped"]
    assert offered("fit", "x", "lorentzian", "--background=fl") == ["--background=flat"]
    assert offered("completion", "") == ["bash", "zsh", "fish"]


def test_names_of_the_store() -> None:
    assert offered("fit", "x", "lorentzian", "-o", "atom") == ["atom_number"]
    assert offered("fit", "x", "lorentzian", "--along", "coil") == ["coil_current"]
    assert offered("scans", "--machine", "") == ["heron"]
    assert "hold-in-trap" in offered("sequence", "")
    assert "long-hold" in offered("scans", "--sequence", "")


def test_files_are_left_to_the_shell() -> None:
    for words in (("take", ""), ("--store", ""), ("scans", "--store", "h"), ("export", "loss-coarse", "a")):
        assert offered(*words) == [FILES]


def test_options_are_offered_once_but_those_that_may_be_repeated() -> None:
    found = offered("fit", "x", "lorentzian", "--plain", "--fixed", "center=3", "--")
    assert "--plain" not in found
    assert "--fixed" in found
    assert offered("fit", "x", "lorentzian", "--fixed", "") == []
    assert offered("scan", "--", "loss-c") == ["loss-coarse"]
    assert offered("scan", "loss-coarse", "loss-") == []


def test_another_store_is_looked_into(tmp_path: Path) -> None:
    assert offered("--store", str(tmp_path / "none.sqlite"), "fit", "") == []
    assert offered("fit", "--store", str(tmp_path / "none.sqlite"), "") == []
    assert not list(tmp_path.glob("*.sqlite"))


def ask(run: Any, shell: str, *words: str) -> list[str]:
    answer = run("completion", "--complete", "\x1f".join([shell, *words]))
    assert (answer.code, answer.err) == (0, "")
    return [line.split("\t")[0] for line in answer.out.splitlines()]


def test_bash_gets_what_stands_behind_its_breaks(run: Any) -> None:
    assert ask(run, "bash", "fit", "x", "lorentzian", "--background", "=", "fl") == ["flat"]
    assert ask(run, "zsh", "fit", "x", "lorentzian", "--background=fl") == ["--background=flat"]
    assert ask(run, "bash", "fit", '"loss-c') == ["loss-coarse"]
    assert ask(run, "bash", "fit", "loss-coarse\\#") == ["loss-coarse#1"]
    assert ask(run, "bash", "take", "") == [":files"]


@pytest.mark.parametrize("asked", ["", "bash", "tcsh\x1ffit\x1f", "bash\x1f\x1f\x1f", "zsh\x1f\ud800\x1f\n"])
def test_nonsense_is_answered_in_silence(run: Any, asked: str) -> None:
    answer = run("completion", "--complete", asked)
    assert (answer.code, answer.err) == (0, "")


def test_a_store_that_is_none_is_no_complaint(
    run: Any, at_home: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    for where in ("none.sqlite", str(at_home), "postgresql://127.0.0.1:1/x"):
        monkeypatch.setenv("NIGHTFOLD_STORE", where)
        assert ask(run, "zsh", "fit", "") == []
        assert ask(run, "zsh", "sca") == ["scans", "scan"]


def test_it_is_quick() -> None:
    """Nothing that takes long is loaded."""
    code = """
import sys
from nightfold_cli.main import main
main(["completion", "--complete", "zsh\\x1ffit\\x1f"])
main(["completion", "--complete", "zsh\\x1ffit\\x1fx\\x1florentzian\\x1f-o\\x1f"])
heavy = {"numpy", "pandas", "sqlalchemy", "rich", "matplotlib", "xarray", "scipy", "pydantic"}
assert not heavy & set(sys.modules), heavy & set(sys.modules)
main(["completion", "--complete", "zsh\\x1ffit\\x1fx\\x1f"])
assert not (heavy - {"numpy"}) & set(sys.modules)
"""
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert "loss-coarse\t" in done.stdout


def test_the_script_in_json_and_without_a_shell(run: Any) -> None:
    answer = json.loads(run("completion", "fish", "--json").out)
    assert answer["shell"] == "fish"
    assert "complete -c nightfold" in answer["script"]
    assert run("completion").code == 2
    assert run("completion", "csh").code == 2


def in_shell(shell: str, run: Any, at_home: Path, code: str) -> str:
    """Run code in a shell that has our script, with ``nightfold`` being this program."""
    if shutil.which(shell) is None:
        pytest.skip(f"{shell} is not installed")
    script = at_home / "script"
    script.write_text(run("completion", shell).out, encoding="utf-8")
    program = at_home / "bin" / "nightfold"
    program.parent.mkdir()
    program.write_text(f'#!/bin/sh\nexec "{sys.executable}" -m nightfold_cli.main "$@"\n', encoding="utf-8")
    program.chmod(0o755)
    done = subprocess.run(
        [shell, "-c", code],
        capture_output=True,
        text=True,
        env={**os.environ, "PATH": f"{program.parent}:{os.environ['PATH']}", "SCRIPT": str(script)},
        timeout=60,
        check=False,
    )
    assert done.stderr == ""
    return done.stdout


def test_in_bash(run: Any, at_home: Path) -> None:
    code = """
source "$SCRIPT"
try() { COMP_WORDS=("$@"); COMP_CWORD=$(($# - 1)); _nightfold; printf '%s|' "${COMPREPLY[@]}"; echo; }
try nightfold sca
try nightfold fit loss-c
try nightfold fit x lorentzian --background = fl
try nightfold take ''
complete -p nightfold
"""
    assert in_shell("bash", run, at_home, code).splitlines() == [
        "scans|scan|", "loss-coarse|", "flat|", "|", "complete -F _nightfold nightfold",
    ]  # fmt: skip


def test_in_zsh(run: Any, at_home: Path) -> None:
    code = """
compdef() { : }
_describe() { print -r -- "${(j:|:)${(P)2}}" }
_files() { print files }
source "$SCRIPT"
try() { local -a words; words=("$@"); CURRENT=$#; _nightfold }
try nightfold fit loss-c
try nightfold take ''
"""
    assert in_shell("zsh", run, at_home, code).splitlines() == ["loss-coarse:hold-in-trap", "files"]


def test_in_fish(run: Any, at_home: Path) -> None:
    code = 'source "$SCRIPT"; complete -C "nightfold fit loss-c"; complete -C "nightfold take scr"'
    assert in_shell("fish", run, at_home, code).splitlines() == ["loss-coarse\thold-in-trap", "script"]
