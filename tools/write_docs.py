"""Write ``docs/tables.md`` and ``docs/commands.md`` from schemas, settings and ``--help``.

Run ``python -m tools.write_docs`` after changing any of them; a test holds the files against their sources.
"""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import click
from pydantic import BaseModel

from legworth.cli import cli
from legworth.results import result_schemas
from network.schema import TableSchema, input_schemas, table_schema
from network.settings import NetworkSettings

TAKEN = ("requests", "history", "adjustments", "flights", "seats")
GIVEN = ("decisions", "simulation", "estimates", "leg_totals", "proof")
"""Tables that commands take and give beside those of a network folder and its results."""

DOCS = Path(__file__).parent.parent / "docs"


def documents() -> dict[str, str]:
    """Text of every generated document by file name."""
    return {"tables.md": tables_document(), "commands.md": commands_document()}


def tables_document() -> str:
    """Every column of every table, and every setting."""
    lines = [
        "# Tables and settings",
        "",
        "Written from the table schemas by `python -m tools.write_docs`; do not edit.",
        "",
        "Tables are CSV (UTF-8, commas, a header line) or Parquet with the same columns. A blank cell is a missing"
        " value. Columns marked *optional* may be left out.",
        "",
        "## network.toml",
        "",
        "| setting | default | meaning |",
        "| --- | --- | --- |",
        *_settings(NetworkSettings, ""),
        "",
        "# What goes in",
        "",
    ]
    for schema in (*input_schemas().values(), *(table_schema("legworth", name) for name in TAKEN)):
        lines += _table(schema)
    lines += ["# What comes out", ""]
    for schema in (*result_schemas().values(), *(table_schema("legworth", name) for name in GIVEN)):
        lines += _table(schema)
    return "\n".join(lines).rstrip() + "\n"


def commands_document() -> str:
    """The help text of every command."""
    lines = ["# Commands", "", "Written from `--help` by `python -m tools.write_docs`; do not edit.", ""]
    for title, command in _commands("legworth", cli):
        context = click.Context(
            command, info_name=title, max_content_width=100, terminal_width=100, help_option_names=["-h", "--help"]
        )
        lines += [f"## {title}", "", "```text", command.get_help(context), "```", ""]
    return "\n".join(lines).rstrip() + "\n"


def _commands(title: str, command: click.Command) -> Iterator[tuple[str, click.Command]]:
    """A command and, if it is a group, those within it."""
    yield title, command
    if isinstance(command, click.Group):
        for name, within in sorted(command.commands.items()):
            yield from _commands(f"{title} {name}", within)


def _settings(model: type[BaseModel], prefix: str) -> Iterator[str]:
    for name, field in model.model_fields.items():
        nested = field.annotation
        if isinstance(nested, type) and issubclass(nested, BaseModel):
            yield from _settings(nested, f"{prefix}{name}.")
            continue
        default = "*required*" if field.is_required() else f"`{field.default!r}`" if field.default != () else ""
        yield f"| `{prefix}{name}` | {default} | {field.description} |"


def _table(schema: TableSchema) -> list[str]:
    lines = [f"## {schema.name}", "", schema.description + (" Optional." if schema.optional else ""), ""]
    lines += ["| column | type | unit | limits | meaning |", "| --- | --- | --- | --- | --- |"]
    for column in schema:
        mark = " *optional*" if column.optional else ""
        lines.append(
            f"| `{column.name}` | {column.type}{mark} | {column.unit} | {column.limits} | {column.description} |"
        )
    lines += ["", f"Key: {', '.join(f'`{name}`' for name in schema.key)}.", ""]
    return lines


def main() -> None:
    """Write the documents."""
    DOCS.mkdir(exist_ok=True)
    for name, text in documents().items():
        (DOCS / name).write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
