"""README and code say the same: tables, settings, commands and what they print.

``UPDATE_README=1 python -m pytest tests/test_readme.py`` writes the tables anew from the code.
"""

import os
import re
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner

import shelfmap
from shelfmap.cli import main
from shelfmap.columns import LAYERS, markdown_table
from shelfmap.settings import Settings, markdown_settings
from shelfmap.words import CAUTIONS, STATUSES

TOP = Path(__file__).parent.parent
README = TOP / "README.md"
EDITING_LAYERS = {"coast_lines", "transect_lines"}


def statuses_table():
    rows = [f"| `{word}` | {meaning} |" for word, meaning in STATUSES.items()]
    return "\n".join(["| status | meaning |", "|---|---|", *rows])


BLOCKS = {"settings": markdown_settings(), "statuses": statuses_table()} | {
    f"columns {layer}": markdown_table(layer) for layer in LAYERS if layer not in EDITING_LAYERS
}


def fenced(language):
    return re.findall(rf"^```{language}\n(.*?)^```", README.read_text(encoding="utf-8"), flags=re.DOTALL | re.MULTILINE)


def commands():
    return [line for block in fenced("sh") for line in block.splitlines() if line]


@pytest.mark.parametrize("name", BLOCKS)
def test_tables_are_those_of_the_code(name):
    """Every table of README is the one the code gives."""
    text = README.read_text(encoding="utf-8")
    closing = name.split()[0]
    pattern = re.compile(rf"<!-- {name} -->\n(.*?)<!-- /{closing} -->", flags=re.DOTALL)
    wanted = f"<!-- {name} -->\n{BLOCKS[name]}\n<!-- /{closing} -->"
    if os.environ.get("UPDATE_README"):
        README.write_text(pattern.sub(lambda _: wanted, text), encoding="utf-8")
        text = README.read_text(encoding="utf-8")
    assert pattern.search(text), f"README has no block {name}"
    assert wanted in text, f"README's block {name} is stale: see this file's first lines"


def test_every_layer_is_described():
    """README has a heading for each layer of the output."""
    text = README.read_text(encoding="utf-8")
    assert all(f"### `{layer}`" in text for layer in LAYERS if layer not in EDITING_LAYERS)


def test_demo_command_prints_what_readme_says(tmp_path, monkeypatch):
    """The first command's last step makes the files named and prints the counts shown."""
    install, demo = commands()[0].split(" && .venv/bin/shelfmap ")
    assert install == "python3 -m venv .venv && .venv/bin/pip install ."
    monkeypatch.chdir(tmp_path)
    result = CliRunner().invoke(main, demo.split())
    assert result.exit_code == 0, result.output
    assert result.stdout.strip() == str(tmp_path / "my_demo" / "demo.gpkg")
    (shown,) = fenced("text")
    assert shown.strip() in result.stderr
    for name in ("demo.tif", "demo_gauges.csv", "demo.toml", "demo.gpkg"):
        assert (tmp_path / "my_demo" / name).exists()


def test_test_command_is_the_one_the_project_runs():
    """README's second command is what the continuous check runs, and names an extra that exists."""
    command = commands()[1]
    assert command == 'python3 -m venv .venv && .venv/bin/pip install -e ".[test]" && .venv/bin/python -m pytest'
    assert "grep -m 1 'pytest$' README.md" in (TOP / ".ci" / "run").read_text(encoding="utf-8")
    project = tomllib.loads((TOP / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert "test" in project["optional-dependencies"]


@pytest.mark.parametrize("command", commands()[2:])
def test_other_commands_name_verbs_and_options_that_exist(command):
    """Each further command is a verb of the command line, with options it knows."""
    program, verb, *arguments = command.split()
    assert program == "shelfmap"
    options = {option for parameter in main.commands[verb].params for option in parameter.opts}
    assert {argument for argument in arguments if argument.startswith("-")} <= options


def test_verbs_in_the_text_exist():
    """Every verb that README's text names is there, and every verb is named."""
    text = re.sub(r"^```.*?^```", "", README.read_text(encoding="utf-8"), flags=re.DOTALL | re.MULTILINE)
    named = set(re.findall(r"`(?:\S*/)?shelfmap ([a-z]+)\b", text))
    named |= {command.split()[1] for command in commands()[2:]} | {"demo"}
    assert named == set(main.commands)


def test_settings_example_is_valid(tmp_path):
    """The settings of the real coast are accepted as they stand."""
    example, region = fenced("toml")
    (tmp_path / "coast.toml").write_text(example, encoding="utf-8")
    settings = Settings.from_toml(tmp_path / "coast.toml")
    assert settings.grid.path == tmp_path / "dem.tif"
    assert settings.response.periods_h == (0.5, 2.0)
    (tmp_path / "coast.toml").write_text(example + region, encoding="utf-8")
    assert Settings.from_toml(tmp_path / "coast.toml").field.modes == 6


def test_python_example_runs(tmp_path, monkeypatch, capsys):
    """The Python lines run as they stand, on the demo's settings under their name."""
    CliRunner().invoke(main, ["demo", str(tmp_path)])
    (tmp_path / "demo.gpkg").unlink()
    (tmp_path / "demo.toml").rename(tmp_path / "coast.toml")
    monkeypatch.chdir(tmp_path)
    (example,) = fenced("python")
    exec(compile(example, "README", "exec"), {})
    assert "'ok'" in capsys.readouterr().out


def test_stages_named_exist():
    """The functions README names for Python are public."""
    text = README.read_text(encoding="utf-8")
    paragraph = text[text.index("The stages can be called one by one") : text.index("## What it takes")]
    for name in re.findall(r"`(\w+)`", paragraph):
        assert name in shelfmap.__all__
        assert callable(getattr(shelfmap, name))


def test_nothing_is_left_to_fill_in():
    """No placeholder, a word in capitals on a line of its own, is left in the two guides."""
    for name in ("README.md", "DEVELOPERS.md"):
        assert not re.findall(r"^[A-Z_]{4,}$", (TOP / name).read_text(encoding="utf-8"), flags=re.MULTILINE)


def test_cautions_stand_in_full():
    """README carries the cautions word for word."""
    assert CAUTIONS in " ".join(README.read_text(encoding="utf-8").split())
