"""The README holds what a reader will copy: commands that exist, files that parse."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import typer.main

from thermo import cli

TEXT = (Path(__file__).resolve().parent.parent / "README.md").read_text(encoding="utf-8")
BLOCKS = re.findall(r"^```(\w+)\n(.*?)^```$", TEXT, re.MULTILINE | re.DOTALL)


def test_nothing_is_left_to_fill_in() -> None:
    assert "@@" not in TEXT


def test_two_lines_set_it_up() -> None:
    lines = [
        line
        for kind, block in BLOCKS
        if kind == "sh"
        for line in block.splitlines()
        if line.startswith("python3 -m venv .venv && .venv/bin/pip install ")
    ]
    assert len(lines) == 2
    assert ".venv/bin/partita fit data_demo/study.toml" in lines[0]
    assert lines[1].endswith("&& .venv/bin/pytest")


def test_toml_blocks_parse() -> None:
    blocks = [block for kind, block in BLOCKS if kind == "toml"]
    assert blocks
    for block in blocks:
        assert tomllib.loads(block)["format"] == 1


def test_python_blocks_compile() -> None:
    blocks = [block for kind, block in BLOCKS if kind == "python"]
    assert blocks
    for block in blocks:
        compile(block, "README.md", "exec")


def test_commands_exist() -> None:
    known = set(typer.main.get_command(cli.app).commands)  # type: ignore[attr-defined]
    shell = " \n".join(block for kind, block in BLOCKS if kind == "sh")
    inline = " \n".join(re.findall(r"`([^`\n]+)`", TEXT))
    named = set(re.findall(r"(?:^|/|\s)partita ([a-z]\w*)", f"{shell}\n{inline}", re.MULTILINE))
    assert named
    assert named <= known
    for name in known:
        assert re.search(rf"`(partita )?{name} ", TEXT), name
