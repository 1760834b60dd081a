"""Texts for the user: commands that work as printed, the safety notice, and no claim too many."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from pulsemend.commands import parser
from pulsemend.notice import SAFETY_NOTICE

REPOSITORY = Path(__file__).resolve().parents[2]
PACKAGE = REPOSITORY / "app" / "pulsemend"

INSTALL_AND_SEE = "python3 -m venv .venv && .venv/bin/pip install . && .venv/bin/pulsemend demo"
INSTALL_AND_TEST = "python3 -m venv .venv && .venv/bin/pip install -e '.[test]' && .venv/bin/python -m pytest"

CLAIMS = re.compile(
    r"safe to\b|clinically validated|artifact-free|artefact-free|diagnos|proven\b", re.IGNORECASE
)
"""Facts, T-3.1, and "proven" from the safety section of the design."""


def readme() -> str:
    return (REPOSITORY / "README.md").read_text("utf-8")


def user_texts() -> list[Path]:
    """Everything a user may read: documents, the sample's texts and all strings of the program."""
    texts = [REPOSITORY / "README.md", *(PACKAGE / "guide").glob("*.md"), *PACKAGE.rglob("*.py")]
    return texts + [
        path for path in (REPOSITORY / "sample_data").iterdir() if path.suffix in {".md", ".toml"}
    ]


def test_readme_prints_both_commands_in_order() -> None:
    """`.ci/run` takes them from there and runs them."""
    lines = [line for line in readme().splitlines() if line.startswith("python3 -m venv")]
    assert lines == [INSTALL_AND_SEE, INSTALL_AND_TEST]


def test_readme_shows_every_command() -> None:
    assert all(f"`pulsemend {name} " in readme() for name in parser.COMMANDS)


def test_readme_holds_the_safety_notice_word_for_word() -> None:
    text = " ".join(readme().split())
    assert all(paragraph in text for paragraph in SAFETY_NOTICE)


@pytest.mark.parametrize("path", user_texts(), ids=lambda path: str(path.relative_to(REPOSITORY)))
def test_no_claim_that_must_not_be_made(path: Path) -> None:
    assert CLAIMS.findall(path.read_text("utf-8")) == []


@pytest.mark.parametrize(
    "claim", ["Safe to use", "clinically validated", "an artifact-free set", "for diagnosis", "proven method"]
)
def test_such_a_claim_would_be_found(claim: str) -> None:
    assert CLAIMS.search(claim)
