"""README's commands, links and cautions."""

from __future__ import annotations

import re
import shlex
import subprocess
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")


def between_markers() -> list[str]:
    """The lines of README between its markers for the test command, fences left out."""
    lines = README.partition("<!-- tests -->\n")[2].partition("<!-- end -->")[0].splitlines()
    return [line for line in lines if line.strip() and not line.startswith("```")]


def test_readme_has_one_test_command_that_stands_alone() -> None:
    assert README.count("<!-- tests -->") == 1 and README.count("<!-- end -->") == 1
    (command,) = between_markers()
    parts = [shlex.split(part) for part in command.split("&&")]
    assert parts[0] == ["python3", "-m", "venv", ".venv"]
    assert parts[1][:4] == [".venv/bin/python", "-m", "pip", "install"] and parts[1][-1] == ".[test]"
    assert parts[2][:3] == [".venv/bin/python", "-m", "pytest"]


def test_continuous_integration_runs_that_command() -> None:
    script = ROOT / ".ci" / "run"
    if not script.is_file():
        pytest.skip("no .ci/run beside this copy of the tests")
    line = next(line for line in script.read_text(encoding="utf-8").splitlines() if line.startswith("command="))
    shown = subprocess.run(
        ["bash", "-c", f'{line}; printf %s "$command"'], cwd=ROOT, capture_output=True, text=True, check=True
    )
    assert shown.stdout == between_markers()[-1]


def test_the_other_command_installs_and_runs_the_demo() -> None:
    blocks = re.findall(r"```sh\n(.*?)```", README, re.DOTALL)
    lines = blocks[0].splitlines()
    assert len(lines) == 1
    assert lines[0].endswith(".venv/bin/realize demo") and " install -q . " in lines[0]


@pytest.mark.parametrize("text", [README, DEVELOPERS], ids=["README", "DEVELOPERS"])
def test_links_resolve(text: str) -> None:
    for target in re.findall(r"\]\(([^)#]+)", text):
        assert "://" in target or (ROOT / target).exists(), target


def test_readme_says_what_must_not_be_left_out() -> None:
    for words in ("BSD-3-Clause", "GPL-2.0", "full model", "limits on force", "licensed practice", "hurt someone"):
        assert words in re.sub(r"\s+", " ", README), words


def test_developers_has_three_commands() -> None:
    block = re.search(r"```sh\n(.*?)```", DEVELOPERS, re.DOTALL)
    assert block is not None
    assert len(block[1].splitlines()) == 3


def test_developers_lists_every_layer() -> None:
    cells = " ".join(re.findall(r"^\| (.*?) \|", DEVELOPERS, re.MULTILINE))
    for part in (ROOT / "realize").iterdir():
        if part.is_dir() and (part / "__init__.py").is_file():
            assert f"`{part.name}`" in cells, part.name
