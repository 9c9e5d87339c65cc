"""The generated documents are fresh, and nothing that users meet is missing from them."""

from __future__ import annotations

from pathlib import Path

import pytest

from legworth.cli import cli
from tools.write_docs import DOCS, documents

README = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")


@pytest.mark.parametrize("name", sorted(documents()))
def test_generated_documents_are_fresh(name: str) -> None:
    assert (DOCS / name).read_text(encoding="utf-8") == documents()[name], "run python -m tools.write_docs"


@pytest.mark.parametrize("command", sorted(cli.commands))
def test_every_command_stands_in_the_readme(command: str) -> None:
    assert f"legworth {command}" in README


def test_every_error_has_its_exit_code_in_the_help() -> None:
    from network import errors

    codes = {getattr(errors, name).exit_code for name in errors.__all__}
    for code in codes:
        assert f"\n  {code}    " in (cli.epilog or "")
