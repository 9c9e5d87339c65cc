"""The commands of the control service: serve, tokens."""

from __future__ import annotations

from pathlib import Path

import click

from legworth.options import AS_JSON, EXIT_CODES, print_json

__all__ = ["serve", "tokens"]

NEEDED = ("fastapi", "uvicorn", "sqlalchemy", "orjson", "prometheus_client")
STORE = click.option(
    "--store", type=click.Path(path_type=Path, file_okay=False), required=True, help="The store of nights."
)


@click.command(epilog=EXIT_CODES)
@STORE
@click.option(
    "--host", default="127.0.0.1", show_default=True, help="Address to listen on; loopback unless told otherwise."
)
@click.option(
    "--port", type=click.IntRange(0, 65_535), default=8437, show_default=True, help="Port; 0 for any free one."
)
@click.option(
    "--settings", type=click.Path(path_type=Path, dir_okay=False), help="TOML file with the service's settings."
)
@click.option(
    "--at",
    metavar="INSTANT",
    help="Let the service's clock begin at this instant, ISO 8601 with offset, or at the snapshot in force with "
    "`snapshot`: for drills and demonstrations.",
)
@click.option(
    "--bring-ledger-forward",
    is_flag=True,
    help="First bring the ledger of an older version forward. Stop every service that uses it, and back it up, before.",
)
def serve(store: Path, host: str, port: int, settings: Path | None, at: str | None, bring_ledger_forward: bool) -> None:
    """Answer requests and show pages by the night in force of a store, until stopped.

    Asking needs no token unless the settings say so; selling, cancelling and overwriting counts always do.
    """
    from importlib.util import find_spec

    from network import SettingError

    missing = [name for name in NEEDED if find_spec(name) is None]
    if missing:
        raise SettingError(f"the service needs {', '.join(missing)}; install legworth[service]")
    from legworth.service.serving import run_service

    run_service(store, host, port, settings, at, bring_ledger_forward)


@click.group(epilog=EXIT_CODES)
def tokens() -> None:
    """Make, list and withdraw the bearer tokens of a store's service."""


@tokens.command("make", epilog=EXIT_CODES)
@click.argument("holder")
@STORE
@click.option(
    "--may",
    "permissions",
    type=click.Choice(["ask", "sell", "count"]),
    multiple=True,
    default=("ask", "sell"),
    show_default=True,
    help="What it permits; give it once for each: ask, sell and cancel, overwrite counts.",
)
@AS_JSON
def make(holder: str, store: Path, permissions: tuple[str, ...], *, as_json: bool) -> None:
    """Make a token for HOLDER and print it, once: only its hash is kept."""
    from legworth.service.tokens import TokenFile
    from legworth.store import Store

    token = TokenFile(Store.open(store).path / "tokens.json").make(holder, permissions)
    if as_json:
        print_json({"ok": True, "holder": holder, "permissions": list(permissions), "token": token})
        return
    click.echo(token)
    click.echo("keep it safe: it is shown this once, and the store keeps only its hash", err=True)


@tokens.command("list", epilog=EXIT_CODES)
@STORE
@AS_JSON
def listed(store: Path, *, as_json: bool) -> None:
    """List who holds a token, and what it permits."""
    from legworth.service.tokens import TokenFile
    from legworth.store import Store

    held = TokenFile(Store.open(store).path / "tokens.json").tokens()
    if as_json:
        rows = [{"holder": each.holder, "permissions": list(each.permissions), "made": each.made} for each in held]
        print_json({"ok": True, "tokens": rows})
        return
    for each in held:
        click.echo(f"{each.holder}  {', '.join(each.permissions)}  made {each.made}")
    if not held:
        click.echo("nobody holds a token")


@tokens.command("withdraw", epilog=EXIT_CODES)
@click.argument("holder")
@STORE
def withdraw(holder: str, store: Path) -> None:
    """Withdraw the token of HOLDER at once."""
    from legworth.service.tokens import TokenFile
    from legworth.store import Store

    TokenFile(Store.open(store).path / "tokens.json").withdraw(holder)
    click.echo(f"the token of {holder} is withdrawn")
