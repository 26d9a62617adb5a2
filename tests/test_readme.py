"""What the README shows is true."""

import re
import subprocess
import sys
import tomllib
from pathlib import Path

from eddyshed.reduce.cli import parser
from eddyshed.reduce.closures import CLOSURES

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def test_the_own_model_example_prints_what_it_says(tmp_path):
    (code,) = re.findall(r"```python\n(.*?)```", README, flags=re.DOTALL)
    (expected,) = re.findall(r"It prints `(.*?)`", README)
    script = tmp_path / "triad.py"
    script.write_text(code)
    result = subprocess.run(
        [sys.executable, script], capture_output=True, text=True, check=True
    )
    assert result.stdout.strip() == expected


def test_every_command_is_listed():
    commands = next(
        action.choices for action in parser()._actions if action.dest == "command"
    )
    for command in commands:
        assert f"    eddyshed {command} " in README


def test_every_closure_is_listed():
    for name in CLOSURES:
        assert f"| `{name}` |" in README


def test_the_two_commands_stand_near_the_top():
    commands = [line.strip() for line in README.splitlines() if "venv" in line]
    assert commands[0].endswith("eddyshed study configs/demo.toml")
    assert commands[1].endswith("python -m pytest")
    with (ROOT / "pyproject.toml").open("rb") as file:
        extras = tomllib.load(file)["project"]["optional-dependencies"]
    assert {"figures", "test"} <= set(extras)
