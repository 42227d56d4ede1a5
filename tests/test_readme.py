"""README: its code runs, its commands are the real ones, its shown output is what comes out."""

from __future__ import annotations

import ast
import json
import os
import re
import shlex
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

from bench.report import BEGIN, END
from streambasis import cli
from streambasis.cli import CAUTION
from streambasis.commands import watch
from tests.promises import EVENT_KEYS

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text()
BLOCKS = re.findall(r"^```(\w+)\n(.*?)^```$", README, re.MULTILINE | re.DOTALL)


def blocks(language: str) -> list[str]:
    """Return the fenced blocks of one language."""
    return [body for name, body in BLOCKS if name == language]


@pytest.mark.parametrize("code", blocks("python"))
def test_python_blocks_run(code: str, tmp_path: Path) -> None:
    """Every Python block runs on its own, as a reader would paste it, from the clone."""
    (tmp_path / "examples").symlink_to(ROOT / "examples")
    shown = subprocess.run(
        [sys.executable, "-W", "error", "-c", code],
        capture_output=True, text=True, check=False, cwd=tmp_path, env={"PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    assert shown.returncode == 0, shown.stderr


def test_the_two_first_commands_are_there_verbatim() -> None:
    """The command that sets up and runs the main job, and the one that runs the tests."""
    lines = [line for block in blocks("console") for line in block.splitlines()]
    assert lines[:2] == [
        "python3 -m venv .venv && .venv/bin/pip install -q '.[watch]' && "
        ".venv/bin/streambasis watch examples/pump_station.csv",
        "python3 -m venv .venv && .venv/bin/pip install -q -e '.[test]' && .venv/bin/pytest",
    ]


def test_console_commands_parse(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Every streambasis command shown runs on the shipped feed and ends well."""
    lines = [line for block in blocks("console") for line in block.splitlines()]
    commands = [line.rpartition("&& ")[2] for line in lines if "streambasis " in line]
    assert commands
    (tmp_path / "examples").symlink_to(ROOT / "examples")
    monkeypatch.chdir(tmp_path)
    for command in commands:
        words = shlex.split(command.partition(" | ")[0])
        assert words[0].rpartition("/")[2] == "streambasis"
        assert cli.main(words[1:]) == cli.OK, command


def test_the_line_for_shell_completion_works(tmp_path: Path) -> None:
    """After the line that README gives, bash knows how to complete the command."""
    (line,) = [block for block in blocks("sh") if "_COMPLETE" in block]
    command = tmp_path / "streambasis"
    command.write_text(f'#!/bin/sh\nexec {shlex.quote(sys.executable)} -m streambasis "$@"\n')
    command.chmod(0o755)
    shown = subprocess.run(
        ["bash", "--norc", "-c", f"{line}\ncomplete -p streambasis"],
        capture_output=True, text=True, check=False, cwd=ROOT,
        env=os.environ | {"PATH": f"{tmp_path}:{os.environ['PATH']}", "PYTHONPATH": str(ROOT)},
    )  # fmt: skip
    assert shown.returncode == 0, shown.stderr
    assert "streambasis" in shown.stdout


def test_commands_for_a_plant_hold_options_that_exist() -> None:
    """What cannot run here, for want of the plant, is taken by the command line all the same."""
    lines = [line for block in blocks("sh") for line in block.splitlines()]
    commands = [shlex.split(line) for line in lines if line.startswith("streambasis watch ")]
    assert commands
    for words in commands:
        watch.make_context("watch", words[2:])


def test_the_bench_finds_its_place() -> None:
    """README has the two marks between which the bench writes its tables, once each."""
    assert [README.count(mark) for mark in (BEGIN, END)] == [1, 1]
    assert README.index(BEGIN) < README.index(END)


def test_the_shown_output_is_what_comes_out(capsys: pytest.CaptureFixture[str]) -> None:
    """The output in README is that of the first command: the same lines, figures aside."""
    assert cli.main(["watch", str(ROOT / "examples" / "pump_station.csv")]) == cli.OK
    figure = re.compile(r"\d[\d.,]*")
    expected = figure.sub("#", blocks("text")[0].strip())
    assert expected == figure.sub("#", capsys.readouterr().out.strip())


def test_caution_is_the_one_of_the_command() -> None:
    """README and help say the same of what the product is not."""
    assert CAUTION in README.replace("**", "")


def test_extras_and_event_keys_are_documented() -> None:
    """Every extra that a user may install, and every key of an event, is explained."""
    extras = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    for extra in extras["optional-dependencies"]:
        if extra != "dev":
            assert f"[{extra}]" in README, extra
    truth = json.loads((ROOT / "examples" / "pump_station.truth.json").read_text())
    assert truth["faults"]
    for key in EVENT_KEYS:
        assert f"`{key}`" in README, key


def test_every_guarantee_names_tests_that_exist() -> None:
    """Each line of the table of guarantees is proved by at least one test, found by its name."""
    table = README.split("## What it guarantees")[1].split("## ")[0]
    lines = [line for line in table.splitlines() if line.startswith("| ")][1:]
    assert len(lines) >= 15
    for line in lines:
        named = re.findall(r"`(tests/\w+\.py)::(test_\w+)`", line)
        assert named, line
        for file, test in named:
            functions = ast.parse((ROOT / file).read_text()).body
            assert test in {getattr(node, "name", None) for node in functions}, f"{file}::{test}"


def test_every_example_is_listed() -> None:
    """README names each script of examples/."""
    for script in (ROOT / "examples").glob("*.py"):
        assert f"examples/{script.name}" in README, script.name


def test_the_tests_that_catch_comparisons_exist() -> None:
    """DEVELOPERS.md names, for each comparison, a test that is there."""
    text = (ROOT / "DEVELOPERS.md").read_text()
    table = text.split("## Comparisons and the tests that catch them")[1].split("\n## ")[0]
    named = set(re.findall(r"`(test_\w+)` \|$", table, re.MULTILINE))
    tests = "".join(path.read_text() for path in (ROOT / "tests").glob("test_*.py"))
    assert len(named) >= 12
    assert {name for name in named if f"def {name}(" not in tests} == set()
