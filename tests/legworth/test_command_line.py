"""The command line around the commands: options, failures, help, and what a terminal or a pipe sees."""

from __future__ import annotations

import json
import os
import pty
import subprocess
import sys
from pathlib import Path

import click
import pulp
import pyarrow.csv
import pytest

from legworth.cli import cli
from network import input_schemas
from tests.commands import run
from tests.folders import Folder

ROOT = Path(__file__).parents[2]


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return Folder().write(tmp_path / "folder")


BAD_OPTIONS = {
    "samples": ["--samples", "0"],
    "time limit": ["--time-limit", "-1"],
    "time limit NaN": ["--time-limit", "nan"],
    "virtual classes": ["--virtual-classes", "0"],
    "jobs": ["--jobs", "0"],
    "seed": ["--method", "randomised", "--seed", "-1"],
    "solver": ["--solver", "abacus"],
    "method": ["--method", "guess"],
    "format": ["--format", "xls"],
    "no number": ["--samples", "many"],
    "unknown option": ["--fast"],
}


@pytest.mark.parametrize("name", BAD_OPTIONS)
def test_options_out_of_their_limits_are_refused(name: str, folder: Path, tmp_path: Path) -> None:
    arguments = ["price", folder, "--out", tmp_path / "out", *BAD_OPTIONS[name]]
    outcome, document = run(*arguments), run(*arguments, "--json")
    assert (outcome.code, outcome.out, document.code) == (2, "", 2)
    assert outcome.err
    found = json.loads(document.out)
    assert found["ok"] is False
    assert found["error"]
    assert [path.name for path in tmp_path.iterdir()] == ["folder"]


FIGURES = [
    (name, option.opts[0])
    for name, command in cli.commands.items()
    for option in command.params
    if isinstance(option.type, click.types.FloatParamType)
]


def test_commands_take_figures() -> None:
    assert {("decide", "--fare"), ("price", "--time-limit"), ("simulate", "--demand-factor")} <= set(FIGURES)


@pytest.mark.parametrize(("command", "option"), FIGURES)
@pytest.mark.parametrize("value", ["nan", "inf", "-inf", "-1", "1e400", "many"])
def test_a_figure_is_finite_and_within_limits(command: str, option: str, value: str, folder: Path) -> None:
    """An infinity is no figure of the trade; -1 is below every limit there is."""
    arguments = [folder] * sum(isinstance(each, click.Argument) for each in cli.commands[command].params)
    outcome = run(command, *arguments, f"{option}={value}")
    assert (outcome.code, outcome.out) == (2, "")
    assert f"Invalid value for '{option}'" in outcome.err


@pytest.mark.parametrize("where", ["legs.csv", "legs.csv/deep"])
def test_a_place_that_cannot_be_written_is_refused(where: str, folder: Path) -> None:
    before = sorted(folder.parent.rglob("*"))
    assert run("price", folder, "--out", folder / where).code == 2
    assert run("compare", folder, "--picture", folder / where / "x.png").code == 2
    assert sorted(folder.parent.rglob("*")) == before


def test_a_full_disk_leaves_yesterdays_results(folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    out = tmp_path / "out"
    assert run("price", folder, "--out", out).code == 0
    before = {path.name: path.read_bytes() for path in out.iterdir()}
    write = pyarrow.csv.write_csv

    def write_some(table: object, path: Path, *options: object) -> None:
        if path.stem == "comparison":
            raise OSError(28, "No space left on device")
        write(table, path, *options)

    monkeypatch.setattr(pyarrow.csv, "write_csv", write_some)
    Folder().cell("fares.csv", 2, "fare", "121").write(folder)
    outcome = run("price", folder, "--out", out)
    assert (outcome.code, outcome.out) == (2, "")
    assert "No space left on device" in outcome.err
    assert {path.name: path.read_bytes() for path in out.iterdir()} == before
    assert sorted(path.name for path in tmp_path.iterdir()) == ["folder", "out"]


def test_without_its_solver_nothing_is_published(folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(pulp.COIN_CMD, "available", lambda _: False)
    arguments = ["price", folder, "--out", tmp_path / "out"]
    outcome = run(*arguments)
    assert (outcome.code, outcome.out) == (3, "")
    assert len(outcome.err.splitlines()) == 1
    assert "cbc cannot be started" in outcome.err
    assert json.loads(run(*arguments, "--json").out)["error"] == outcome.err.strip()
    assert [path.name for path in tmp_path.iterdir()] == ["folder"]


def test_interruption_ends_with_130(folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def interrupted(*_: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(pyarrow.csv, "write_csv", interrupted)
    outcome = run("price", folder, "--out", tmp_path / "out")
    assert (outcome.code, outcome.out, outcome.err.strip()) == (130, "", "interrupted")
    assert not list(tmp_path.glob(".*"))


def test_output_that_cannot_hold_a_name_is_still_written(folder: Path) -> None:
    environment = os.environ | {"PYTHONIOENCODING": "ascii"}
    command = [sys.executable, "-m", "legworth.cli", "check", str(folder)]
    Folder().replace("network.toml", "Tern Sound", "Mære Süd").write(folder)
    text = subprocess.run(command, cwd=ROOT, capture_output=True, env=environment, check=True)
    assert text.stdout.decode("ascii").startswith(r"M\xe6re S\xfcd Ferries")
    document = subprocess.run([*command, "--json"], cwd=ROOT, capture_output=True, env=environment, check=True)
    assert json.loads(document.stdout)["network"] == "Mære Süd Ferries"


def test_progress_is_shown_on_a_terminal_alone(folder: Path, tmp_path: Path) -> None:
    command = [sys.executable, "-m", "legworth.cli", "price", str(folder), "--out", str(tmp_path / "out"), "--json"]
    piped = subprocess.run(command, cwd=ROOT, capture_output=True, check=True)
    assert piped.stderr == b""
    parent, child = pty.openpty()
    environment = os.environ | {"TERM": "xterm-256color", "COLUMNS": "100"}
    process = subprocess.Popen(command, cwd=ROOT, stdout=subprocess.DEVNULL, stderr=child, env=environment)
    os.close(child)
    shown = b""
    try:
        while piece := os.read(parent, 4096):
            shown += piece
    except OSError:  # the way in which Linux says that the other end is closed
        pass
    finally:
        os.close(parent)
    assert process.wait() == 0
    assert b"Pricing legs" in shown


@pytest.mark.parametrize("command", [[], *([name] for name in cli.commands)])
def test_help_says_what_there_is(command: list[str]) -> None:
    outcome = run(*command, "--help")
    assert (outcome.code, outcome.err) == (0, "")
    assert outcome.out.startswith("Usage: legworth")
    assert "Exit codes:" in outcome.out
    if not command:
        for name, entry in cli.commands.items():
            assert f"  {name} " in outcome.out
            assert entry.get_short_help_str(40).rstrip(".")[:20] in outcome.out


def test_help_is_answered_without_heavy_libraries() -> None:
    program = (
        "import sys\nfrom legworth.cli import main\nsys.argv = ['legworth', 'price', '--help']\n"
        "try:\n    main()\nexcept SystemExit as stop:\n    assert not stop.code\n"
        "print(sorted(name for name in sys.modules if '.' not in name))"
    )
    done = subprocess.run([sys.executable, "-c", program], cwd=ROOT, capture_output=True, encoding="utf-8", check=True)
    loaded = set(done.stdout.splitlines()[-1].strip("[]").replace("'", "").split(", "))
    assert "click" in loaded
    assert not loaded & {"numpy", "pandas", "pyarrow", "scipy", "pulp", "matplotlib", "networkx", "pydantic", "rich"}


def test_the_version_is_that_of_the_package() -> None:
    from legworth import __version__  # noqa: PLC0415

    assert run("--version").out.split()[-1] == __version__


def test_the_help_names_every_table() -> None:
    text = " ".join(run("--help").out.split())
    for name in input_schemas():
        assert name in text
