"""``trapd token``: who may speak to the daemon over the network."""

from __future__ import annotations

import click

from trapd.cli.answer import examples, json_option, tell_json, wants_json
from trapd.cli.daemon import connect, daemon_option


@click.group(
    "token",
    short_help="Access tokens: new, list, revoke.",
    epilog=examples("trapd token new scanner --role operate", "trapd token list", "trapd token revoke scanner"),
)
def token_command() -> None:
    """Access tokens: new, list, revoke. Over the local socket no token is needed."""


@token_command.command("new", epilog=examples("trapd token new scanner --role operate"))
@click.argument("name")
@click.option("--role", type=click.Choice(["read", "operate", "administer"]), default="read", show_default=True)
@json_option
@daemon_option
def new(name: str, role: str, at: str | None) -> None:
    """Make a token for NAME. It is shown once and kept nowhere; whoever carries it is NAME in the record."""
    with connect(at) as client:
        answer = client.new_token(name, role)
    if wants_json():
        tell_json(answer)
        return
    click.echo(answer["token"])
    click.echo(f"{name} ({role}): shown this once. Its bearer sets TRAPD_TOKEN to it.", err=True)


@token_command.command("list", epilog=examples("trapd token list"))
@json_option
@daemon_option
def list_(at: str | None) -> None:
    """The tokens in force."""
    with connect(at) as client:
        tokens = client.tokens()
    if wants_json():
        tell_json({"tokens": tokens})
        return
    from trapd.cli.terminal import say, table

    if not tokens:
        say("no tokens")
        return
    rows = [(one["name"], one["role"], one["time"], one["made_by"], str(one["entry"])) for one in tokens]
    table(("name", "role", "made (UTC)", "by", ">entry"), rows)


@token_command.command("revoke", epilog=examples("trapd token revoke scanner"))
@click.argument("name")
@json_option
@daemon_option
def revoke(name: str, at: str | None) -> None:
    """Revoke the token of NAME, at once."""
    with connect(at) as client:
        answer = client.revoke_token(name)
    if wants_json():
        tell_json(answer)
    else:
        click.echo(f"{name}: revoked (entry {answer['entry']})")
