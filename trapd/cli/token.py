"""``trapd token``: who may speak to the daemon over the network."""

from __future__ import annotations

import click

from trapd.cli.answer import Data, tell
from trapd.cli.options import at_option, command, examples
from trapd.cli.terminal import say, table
from trapd.client import Client


@command("trapd token new scanner --role operate")
@click.argument("name")
@click.option("--role", type=click.Choice(["read", "operate", "administer"]), default="read", show_default=True)
@at_option
def new_command(name: str, role: str, at: str | None) -> None:
    """Make a token for NAME. It is shown once and kept nowhere; whoever carries it is NAME in the record."""

    def show(answer: Data) -> None:
        click.echo(answer["token"])
        click.echo(f"{name} ({role}): shown this once. Its bearer sets TRAPD_TOKEN to it.", err=True)

    with Client(at) as client:
        tell(client.new_token(name, role), show)


@command("trapd token list")
@at_option
def list_command(at: str | None) -> None:
    """The tokens in force."""

    def show(answer: Data) -> None:
        rows = [(one["name"], one["role"], one["time"], one["made_by"], str(one["entry"])) for one in answer["tokens"]]
        if rows:
            table(("name", "role", "made (UTC)", "by", ">entry"), rows)
        else:
            say("no tokens")

    with Client(at) as client:
        tell({"tokens": client.tokens()}, show)


@command("trapd token revoke scanner")
@click.argument("name")
@at_option
def revoke_command(name: str, at: str | None) -> None:
    """Revoke the token of NAME, at once."""
    with Client(at) as client:
        tell(client.revoke_token(name), lambda answer: click.echo(f"{name}: revoked (entry {answer['entry']})"))


@click.group(
    commands=[new_command, list_command, revoke_command],
    epilog=examples("trapd token new scanner --role operate", "trapd token list", "trapd token revoke scanner"),
)
def token_command() -> None:
    """Access tokens: new, list, revoke. Over the local socket no token is needed."""
