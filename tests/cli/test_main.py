from __future__ import annotations

import importlib
import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from nightfold import errors
from nightfold_cli.failures import UsageError, explain
from nightfold_cli.main import main
from nightfold_cli.overview import line_of, names

NAMES = names()


def answer(*arguments: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "nightfold_cli.main", *arguments], capture_output=True, text=True, timeout=60
    )


def test_help_imports_nothing_heavy() -> None:
    script = (
        "import sys\n"
        "from nightfold_cli.main import main\n"
        "assert main(['--help']) == 0\n"
        "heavy = {'rich', 'numpy', 'sqlalchemy', 'pandas', 'argparse', 'pydantic', 'nightfold', 'typing', 're'}\n"
        "assert not heavy & sys.modules.keys(), heavy & sys.modules.keys()\n"
    )
    done = subprocess.run([sys.executable, "-S", "-c", script], capture_output=True, text=True, env=_paths())
    assert done.returncode == 0, done.stderr


def test_help_of_a_command_imports_nothing_heavy() -> None:
    script = (
        "import sys\n"
        "from nightfold_cli.main import main\n"
        f"for name in {NAMES}:\n"
        "    assert main([name, '--help']) == 0\n"
        "heavy = {'rich', 'numpy', 'sqlalchemy', 'pandas', 'pydantic', 'scipy'}\n"
        "assert not heavy & sys.modules.keys(), heavy & sys.modules.keys()\n"
    )
    done = subprocess.run([sys.executable, "-S", "-c", script], capture_output=True, text=True, env=_paths())
    assert done.returncode == 0, done.stderr


def _paths() -> dict[str, str]:
    import nightfold
    import nightfold_cli

    roots = [str(Path(str(module.__file__)).parent.parent) for module in (nightfold, nightfold_cli)]
    return {**os.environ, "PYTHONPATH": os.pathsep.join(roots)}


def test_overview_names_every_command(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--help"]) == 0
    text = capsys.readouterr().out
    for name in NAMES:
        assert f"  {name} " in text
    assert max(map(len, text.split("\n"))) <= 80


@pytest.mark.parametrize("name", NAMES)
def test_every_command_has_help_with_an_example(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    module = importlib.import_module(f"nightfold_cli.commands.{name.replace('-', '_')}")
    assert line_of(name) == module.HELP
    assert main([name, "--help"]) == 0
    text = capsys.readouterr().out
    assert "examples:\n  nightfold" in text
    assert all(
        f"nightfold {name}" in line or f" {name}" in line or line[0] == " " for line in module.EXAMPLES
    )


def test_help_by_word(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["help", "take"]) == 0
    assert "usage: nightfold take" in capsys.readouterr().out
    assert main(["help"]) == 0
    assert "usage: nightfold [--store" in capsys.readouterr().out


def test_nothing_asked_shows_the_overview_as_a_usage_error(capsys: pytest.CaptureFixture[str]) -> None:
    assert main([]) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert "usage: nightfold" in captured.err
    assert main(["--store", "a.sqlite"]) == 2
    assert "no command after --store a.sqlite" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("typed", "meant"), [("scnas", "scans"), ("fti", "fit"), ("setaside", "set-aside"), ("exprot", "export")]
)
def test_mistyped_command(typed: str, meant: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main([typed]) == 2
    assert capsys.readouterr().err.startswith(
        f"nightfold: there is no command '{typed}'; did you mean {meant}"
    )


def test_unheard_of_command(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["xyzzy"]) == 2
    assert "'nightfold --help' lists them" in capsys.readouterr().err


def test_version(capsys: pytest.CaptureFixture[str]) -> None:
    from nightfold import __version__

    assert main(["--version"]) == 0
    assert capsys.readouterr().out == f"nightfold {__version__}\n"


def test_wrong_argument_is_a_usage_error(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["nights", "--last", "0"]) == 2
    assert "found '0', wanted a whole number above zero" in capsys.readouterr().err
    assert main(["fit", "7", "lorentzian", "--fixed", "center"]) == 2
    assert "found 'center', wanted NAME=NUMBER" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("error", "code"),
    [
        (errors.StoreMissing("a"), 3),
        (errors.NotFound("a"), 3),
        (FileNotFoundError(2, "No such file", "a.jsonl"), 3),
        (errors.StoreOutdated("a"), 4),
        (errors.StoreTooNew("a"), 4),
        (errors.RecordError("a", "b", "c"), 5),
        (errors.CardError("a"), 5),
        (errors.UnitError("a"), 5),
        (errors.NotAStore("a"), 5),
        (errors.StoreReadOnly("a"), 5),
        (errors.StoreBusy("a"), 5),
        (errors.StoreExists("a"), 5),
        (OSError(28, "No space left on device", "a"), 5),
        (errors.ChoiceNeeded("a"), 2),
        (errors.FitError("a"), 2),
        (UsageError("a"), 2),
        (ZeroDivisionError("a"), 70),
    ],
)
def test_exit_codes(error: Exception, code: int) -> None:
    message, found = explain(error)
    assert found == code
    assert "a" in message
    assert not message.startswith("'")


def test_interrupt(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    def interrupt(args: object) -> int:
        raise KeyboardInterrupt

    monkeypatch.setattr("nightfold_cli.commands.models.run", interrupt)
    assert main(["models"]) == 130
    assert capsys.readouterr().err == "\nnightfold: interrupted\n"


def test_fault_of_our_own_has_no_traceback_unless_asked(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setattr("nightfold_cli.commands.models.run", lambda args: 1 // 0)
    assert main(["models"]) == 70
    said = capsys.readouterr().err
    assert "Traceback" not in said
    assert "a fault of nightfold itself (ZeroDivisionError" in said
    assert main(["models", "--debug"]) == 70
    assert "Traceback" in capsys.readouterr().err


def test_reader_that_went_away_is_no_error() -> None:
    reader, writer = os.pipe()
    os.close(reader)
    command = [sys.executable, "-m", "nightfold_cli.main", "models"]
    done = subprocess.run(command, stdout=writer, stderr=subprocess.PIPE, text=True, timeout=60)
    os.close(writer)
    assert (done.returncode, done.stderr) == (0, "")


def test_models_need_no_store() -> None:
    done = answer("models", "--json")
    assert (done.returncode, done.stderr) == (0, "")
    models = {model["name"]: model for model in json.loads(done.stdout)["models"]}
    assert models["lorentzian"]["default_background"] == "flat"
    assert [part["name"] for part in models["lorentzian"]["parameters"]] == ["center", "fwhm", "amplitude"]


def test_model_that_is_not_there(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["models", "lorenzian"]) == 3
    assert "lorentzian" in capsys.readouterr().err
