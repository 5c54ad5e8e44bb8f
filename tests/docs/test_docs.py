"""The docs tell what the program does: names are complete, commands and examples run, links lead somewhere."""

from __future__ import annotations

import json
import re
import shlex
import shutil
import subprocess
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest

import nightfold
from nightfold.opening import create_store
from nightfold.simulator import write_campaign
from nightfold_cli.main import main
from nightfold_cli.overview import names

ROOT = Path(__file__).resolve().parents[2]
DOCS = ROOT / "docs"
MARKDOWN = sorted([*ROOT.glob("*.md"), *DOCS.glob("*.md")])
FILES = {".py", ".md", ".toml", ".json", ".sh", ".txt", ".dat", ".cfg", ".ini", ".yml", ".yaml", ""}
MACHINE_PATHS = re.compile(r"(?<![\w.:/~-])/(?:tmp|work|home|root|Users)/[\w.]")


def blocks(path: Path, language: str) -> list[str]:
    """Return the code blocks of one language, in order."""
    return re.findall(rf"^```{language}\n(.*?)^```", path.read_text(encoding="utf-8"), re.S | re.M)


def commands(path: Path) -> list[list[str]]:
    """Return what stands behind ``$ nightfold`` in the console blocks, in order."""
    lines = "\n".join(blocks(path, "console")).replace("\\\n", " ").split("\n")
    return [shlex.split(line[2:], comments=True)[1:] for line in lines if line.startswith("$ nightfold")]


def _expand(word: str) -> list[str]:
    """Return the files that a word with ``*`` names, as a shell would."""
    return sorted(map(str, Path().glob(word))) if "*" in word else [word]


def run_commands(path: Path) -> None:
    """Run the commands of a page in the working folder; each must be done."""
    for command in commands(path):
        words = [part for word in command for part in _expand(word)]
        assert main(words) == 0, f"{path.name}: nightfold {shlex.join(command)}"


def run_python(path: Path, **namespace: Any) -> None:
    """Run the Python blocks of a page one after the other, in one namespace."""
    for number, block in enumerate(blocks(path, "python"), 1):
        exec(compile(block, f"{path.name}, block {number}", "exec"), namespace)


@pytest.fixture
def in_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    """Work in an empty folder, with no settings from outside."""
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("NIGHTFOLD_STORE", raising=False)
    return tmp_path


@pytest.fixture(scope="module")
def four_nights(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder with what the tutorial has after its first two steps."""
    folder = tmp_path_factory.mktemp("tutorial")
    campaign = write_campaign(folder / "nightfold-demo", nights=4)
    with create_store(folder / "nightfold.sqlite") as store:
        store.use_card(campaign.card)
        for path in campaign.files:
            store.take_file(path)
    return folder


@pytest.mark.parametrize("command", names())
def test_every_command_has_help_and_stands_in_the_docs(
    command: str, capsys: pytest.CaptureFixture[str]
) -> None:
    page = (DOCS / "commands.md").read_text(encoding="utf-8")
    assert f"\n## {command}\n" in page
    assert re.search(rf"^\| .* \| `{command}\b", page, re.M), "it is missing in the chooser table"
    assert main([command, "--help"]) == 0
    text = capsys.readouterr().out
    assert "examples:\n" in text
    section = page.partition(f"\n## {command}\n")[2].partition("\n## ")[0]
    known = set(re.findall(r"--[a-z][a-z-]*", text)) - {"--help", "--json", "--debug", "--store"}
    assert not {option for option in known if option not in section}, "options that the docs leave out"
    assert "JSON: " in section


def test_every_public_name_stands_in_the_docs() -> None:
    page = (DOCS / "python.md").read_text(encoding="utf-8")
    assert not [name for name in nightfold.__all__ if f"`{name}`" not in page]
    code = "\n".join(blocks(DOCS / "python.md", "python"))
    for kind in (nightfold.Store, nightfold.Scan, nightfold.FitResult):
        public = {name for name in vars(kind) if not name.startswith("_")}
        missing = sorted(
            name
            for name in public
            if f".{name}" not in code and f"`{name}`" not in page and name != "request"
        )
        assert not (set(missing) - {"x", "y", "used", "free_names", "covariance_matrix", "request"}), missing


def test_every_model_and_warning_stands_in_the_docs() -> None:
    from nightfold.fits.models import MODEL_NAMES

    page = (DOCS / "fits.md").read_text(encoding="utf-8")
    assert not [name for name in MODEL_NAMES if f"| `{name}` |" not in page]
    trust = (ROOT / "store/nightfold/fits/engine/trust.py").read_text(encoding="utf-8")
    codes = set(re.findall(r'FitWarning\(\s*"([a-z-]+)"', trust))
    assert len(codes) > 4
    assert not [code for code in codes if f"| `{code}` |" not in page]


def test_the_tutorial_runs(in_folder: Path) -> None:
    run_commands(DOCS / "tutorial.md")
    run_python(DOCS / "tutorial.md")


@pytest.mark.parametrize("page", ["python.md", "fits.md", "sensors.md"])
def test_python_examples_run(page: str, four_nights: Path, in_folder: Path) -> None:
    shutil.copytree(four_nights, in_folder, dirs_exist_ok=True)
    run_python(DOCS / page)
    if page == "fits.md":
        run_commands(DOCS / page)


def readme_records() -> Iterator[dict[str, Any]]:
    """Yield shots made of the README's record: two sweeps and a labelled one of a resonance, with pauses between."""
    (line,) = blocks(ROOT / "README.md", "json")
    for hour, label in ((19, None), (20, None), (21, "loss-coarse")):
        for point in range(15):
            record = json.loads(line)
            current = 60.5 + 0.1 * point + 0.01 * (hour - 19)
            record["started"] = f"2026-10-05T{hour}:{point:02d}:00+02:00"
            record["parameters"]["coil_current"]["value"] = round(current, 3)
            number = 121000 - 60000 / (1 + ((current - 61.2) / 0.2) ** 2) + 900 * (-1) ** point
            record["observables"]["atom_number"]["value"] = round(number)
            yield record if label is None else record | {"scan": label}


def test_the_readme_runs(in_folder: Path) -> None:
    records = list(readme_records())
    Path("2026-10-05.jsonl").write_text(
        "".join(json.dumps(record) + "\n" for record in records), encoding="utf-8"
    )
    run_commands(ROOT / "README.md")
    run_python(ROOT / "README.md", record=records[0])


@pytest.mark.parametrize("page", MARKDOWN, ids=lambda page: page.name)
def test_links_lead_somewhere(page: Path) -> None:
    text = re.sub(r"^```.*?^```", "", page.read_text(encoding="utf-8"), flags=re.S | re.M)
    for link in re.findall(r"\]\(([^)\s]+)\)", text):
        if re.match(r"[a-z]+:", link):
            continue
        name, _, anchor = link.partition("#")
        target = (page.parent / name).resolve() if name else page
        assert target.exists(), f"{page.name} links to {link}"
        if anchor:
            heads = re.findall(r"^#+ (.+)$", target.read_text(encoding="utf-8"), re.M)
            slugs = {re.sub(r"[^\w\- ]", "", head.lower()).replace(" ", "-") for head in heads}
            assert anchor in slugs, f"{page.name} links to {link}"


def test_the_readmes_test_command_is_what_ci_runs() -> None:
    _, command = blocks(ROOT / "README.md", "sh")
    assert command.strip() in (ROOT / ".ci" / "run").read_text(encoding="utf-8")


def test_no_path_of_a_machine_it_was_made_on() -> None:
    listed = subprocess.run(
        ["git", "ls-files", "-co", "--exclude-standard"], cwd=ROOT, capture_output=True, text=True
    )
    if listed.returncode:
        pytest.skip("not in a checkout")
    for name in listed.stdout.splitlines():
        path = ROOT / name
        if path.suffix not in FILES or not path.is_file():
            continue
        found = MACHINE_PATHS.search(path.read_text(encoding="utf-8", errors="replace"))
        assert found is None, f"{name}: {found}"
