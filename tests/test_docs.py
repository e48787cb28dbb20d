"""What README.md says is what the program does."""

from __future__ import annotations

import re
import subprocess
import sys
from pathlib import Path

import pytest

from scanclean.cli import cli
from scanclean.recipe import Recipe, parse_recipe, to_toml

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text("utf-8")
COMMANDS = cli.commands


@pytest.mark.parametrize("name", COMMANDS)
def test_every_command_and_option_is_described(name):
    assert f"scanclean {name}" in README
    for parameter in COMMANDS[name].params:
        for option in parameter.opts:
            if option.startswith("--") and option != "--help":
                assert f"`{option}" in README, option


def test_the_printed_recipe_is_the_one_in_force():
    block = re.search(
        r"<!-- recipe: begin -->\n```toml\n(.*?)```\n<!-- recipe: end -->", README, re.S
    )
    assert block is not None
    assert block[1] == to_toml(Recipe())


def test_recipe_examples_are_recipes():
    examples = re.findall(r"```toml\n(.*?)```", README, re.S)
    assert len(examples) == 3
    assert [len(parse_recipe(example).steps) for example in examples] == [0, 1, 1]


@pytest.mark.parametrize("example", re.findall(r"```python\n(.*?)```", README, re.S))
def test_python_examples_run(example, monkeypatch):
    monkeypatch.chdir(ROOT)
    exec(compile(example, "README.md", "exec"), {})


def test_commands_run(tmp_path):
    """The commands of the shell examples, one after another, in a folder with the fixtures."""
    (tmp_path / "fixtures").symlink_to(ROOT / "fixtures")
    lines = "\n".join(re.findall(r"```bash\n(.*?)```", README, re.S)).splitlines()
    calls = [line for line in lines if line.startswith("scanclean ")]
    assert len(calls) == 4
    for call in calls:
        command = call.replace("scanclean ", f"{sys.executable} -m scanclean ", 1)
        done = subprocess.run(command, shell=True, cwd=tmp_path, capture_output=True, text=True)
        assert done.returncode == 0, (call, done.stderr)
    assert (tmp_path / "back" / "cargo-ledger.thresholded.tif").exists()


def test_the_quick_start_cleans_a_fixture():
    install, tests = re.findall(r"^python3 -m venv .*$", README, re.M)
    assert install.endswith("scanclean clean fixtures/cargo-ledger.png -o out")
    assert tests.endswith("python -m pytest")
    assert (ROOT / "fixtures" / "cargo-ledger.png").exists()


def test_first_paragraph_states_the_job_and_the_caution_follows():
    paragraphs = README.split("\n\n")
    assert "scanned pages" in paragraphs[1]
    assert paragraphs[2].startswith("> **Keep your master scans.**")


if __name__ == "__main__":
    printed = f"<!-- recipe: begin -->\n```toml\n{to_toml(Recipe())}```\n<!-- recipe: end -->"
    parts = re.split(r"<!-- recipe: begin -->.*<!-- recipe: end -->", README, flags=re.S)
    (ROOT / "README.md").write_text(printed.join(parts), "utf-8")
