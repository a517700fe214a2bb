"""The failure table of SAFETY.md: whole rows, and every test that it names exists."""

from __future__ import annotations

import ast
import re
from pathlib import Path

ROOT = Path(__file__).parents[2]


def rows() -> list[list[str]]:
    """Return the cells of each row of the table."""
    section = (ROOT / "SAFETY.md").read_text(encoding="utf-8").split("## Failure table\n")[1].split("\n## ")[0]
    lines = [line for line in section.splitlines() if line.startswith("|")]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines[2:]]


def test_every_row_says_all_six_things() -> None:
    assert len(rows()) >= 20
    assert [row for row in rows() if len(row) != 6 or not all(row)] == []


def test_every_named_test_exists() -> None:
    missing = []
    for row in rows():
        match = re.fullmatch(r"`([\w/]+\.py)::(test_\w+)`", row[4])
        assert match is not None, row[4]
        path = ROOT / "tests" / match[1]
        names = (
            {
                node.name
                for node in ast.walk(ast.parse(path.read_text(encoding="utf-8")))
                if isinstance(node, ast.FunctionDef)
            }
            if path.is_file()
            else set()
        )
        if match[2] not in names:
            missing.append(row[4])
    assert missing == []
