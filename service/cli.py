"""The `shoalmark` command. Heavy modules are imported where they are used, so that help answers at once."""

from __future__ import annotations

import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from service.access import ROLES
from service.errors import ServiceError

if TYPE_CHECKING:
    from service.settings import Settings
    from service.store.unit_of_work import Database


class _Commands(click.Group):
    """A group whose commands end with the message of a service error, not with a traceback."""

    def invoke(self, context: click.Context) -> Any:
        try:
            return super().invoke(context)
        except ServiceError as error:
            lines = [error.message]
            lines.extend(
                f"  {fault.pointer or ''} {fault.detail}"
                + (f"; expected {fault.expected}" if fault.expected else "")
                for fault in error.faults
            )
            raise click.ClickException("\n".join(lines)) from None


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="shoalmark", prog_name="shoalmark")
def main() -> None:
    """Decide lot by lot whether an analyzer reading proves that a specification is met.

    Settings come from SHOALMARK_* environment variables; `shoalmark settings` shows them.
    """


def _settings() -> Settings:
    from service.settings import load_settings

    return load_settings(os.environ)


def _database() -> Database:
    """Open the database of the settings for a command beside the server; the schema must be current."""
    from service.store.schema import check_current
    from service.store.unit_of_work import Database

    url = _settings().database_url
    check_current(url)
    return Database(url)


# --- the service ---------------------------------------------------------------------------------------


@main.command()
@click.option("--check", is_flag=True, help="Walk the whole job once over HTTP, print it, stop.")
@click.option(
    "--port", type=click.IntRange(1, 65535), help="Port on the loopback address; default: a free one."
)
def demo(check: bool, port: int | None) -> None:
    """Build the demo plant in a database of its own and serve it on the loopback address."""
    from service.demo.run import run

    sys.exit(run(check=check, port=port))


@main.command()
def serve() -> None:
    """Serve the API and the pages, by the settings."""
    from service.serving import serve as start

    start(_settings())


@main.command()
@click.option("--service-role", metavar="ROLE", help="PostgreSQL: the role that the service works under.")
def migrate(service_role: str | None) -> None:
    """Bring the database to the schema of this program."""
    from service.store.schema import migrate as bring_up_to_date

    revision = bring_up_to_date(_settings().database_url, service_role)
    click.echo(f"The schema is {revision}.")


@main.command()
def settings() -> None:
    """Show the settings in force, secrets masked."""
    from service.settings import describe

    for row in describe(_settings()):
        click.echo(f"{row.name} = {row.value}  ({row.source})")
        click.echo(f"    {row.sentence}")


@main.command()
@click.option(
    "--anchor", type=click.Path(exists=True, dir_okay=False, path_type=Path), help="File of anchors."
)
def verify(anchor: Path | None) -> None:
    """Verify the record: every entry, every chain; exit status 1 when it is not whole.

    An anchor file holds lines `chain sequence hash`, as they went out with earlier answers.
    """
    from service.ledger import read_anchors
    from service.workflows.ledger import verify_record

    try:
        anchors = () if anchor is None else read_anchors(anchor.read_text("utf-8"))
    except ValueError as error:
        raise click.ClickException(f"{anchor}: {error}") from None
    result = verify_record(_database(), anchors)
    for chain in result.chains:
        click.echo(f"{chain.chain}: {chain.entries} entries, up to {chain.hash}")
    if result.finding is not None:
        click.echo(f"The record is NOT whole. {result.finding}", err=True)
        sys.exit(1)
    click.echo("The record is whole.")


@main.command()
def published() -> None:
    """Compute the published checks on this machine and print a dated report; exit status 1 if one differs."""
    from datetime import UTC, datetime

    from service.published.report import passed, run_all, text_report

    rows = run_all()
    click.echo(text_report(rows, dated=datetime.now(UTC)), nl=False)
    sys.exit(0 if passed(rows) else 1)


@main.command("import")
@click.argument(
    "files", nargs=-1, required=True, type=click.Path(exists=True, dir_okay=False, path_type=Path)
)
@click.option(
    "--about",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    help="YAML or JSON file with the members of the study; default: one of the same name beside FILE.",
)
@click.option(
    "--set",
    "said",
    multiple=True,
    metavar="MEMBER=VALUE",
    help="A member, as text or JSON.",
)
@click.option("--sheet", help="The sheet of a spreadsheet that has several.")
@click.option("--check", is_flag=True, help="Read everything, record nothing.")
def import_(
    files: tuple[Path, ...], about: Path | None, said: tuple[str, ...], sheet: str | None, check: bool
) -> None:
    """Record studies from CSV files, spreadsheets (.xlsx) and JSON documents; nothing, if one cannot be read.

    What a CSV file or a spreadsheet is about stands in a file beside it: replicates.csv is described by
    replicates.yaml, with members such as code, design, product, characteristic, unit, calibrations and
    done_on. A member that is --set counts before that file.
    """
    from service.import_progress import import_files
    from service.workflows.study_files import members_of

    pairs = dict(item.partition("=")[::2] for item in said)
    if len(pairs) != len(said) or not all("=" in item for item in said):
        raise click.BadParameter("each member once, as unit=%", param_hint="--set")
    members = members_of(pairs)
    import_files(_settings(), files, about=about, said=members, sheet=sheet, check=check)


@main.command()
def openapi() -> None:
    """Print the description of the HTTP API."""
    from service import describe_api

    click.echo(describe_api(), nl=False)


# --- accounts ------------------------------------------------------------------------------------------


@main.group()
def user() -> None:
    """People, who sign in and sign."""


@user.command("add")
@click.argument("code")
@click.option("--name", required=True, help="The name as it is to be shown.")
@click.option("--role", "roles", multiple=True, type=click.Choice(ROLES), required=True)
@click.option("--password-file", type=click.File(), help="Read the password from a file, or - for stdin.")
def user_add(code: str, name: str, roles: tuple[str, ...], password_file: Any) -> None:
    """Open the account CODE; asks for the password unless a file gives it."""
    from service.workflows.accounts import add_person

    if password_file is None:
        password = click.prompt("Password", hide_input=True, confirmation_prompt=True)
    else:
        password = password_file.readline().rstrip("\r\n")
    add_person(_database(), code, name, roles, password)
    click.echo(f"{code} has an account: {', '.join(roles)}.")


@user.command("list")
def user_list() -> None:
    """List the accounts."""
    from service.workflows.accounts import list_people

    for person in list_people(_database()):
        state = "" if person.disabled_at is None else f"  disabled {person.disabled_at}"
        click.echo(f"{person.code}  {person.name}  {', '.join(person.roles)}{state}")


@main.group()
def token() -> None:
    """Bearer tokens: for machines, and for people who work over the API."""


@token.command("add")
@click.argument("principal")
@click.option("--role", "roles", multiple=True, type=click.Choice(ROLES), help="For a machine.")
def token_add(principal: str, roles: tuple[str, ...]) -> None:
    """Make a token for PRINCIPAL, a machine with roles or a person with an account, and show it once."""
    from service.workflows.accounts import add_token

    made = add_token(_database(), principal, roles)
    click.echo(f"{made.code}: keep this token safe, it is shown only now.", err=True)
    click.echo(made.secret)


@token.command("list")
def token_list() -> None:
    """List the tokens by code; their secrets are not kept."""
    from service.workflows.accounts import list_tokens

    for stored in list_tokens(_database()):
        state = "" if stored.revoked_at is None else f"  revoked {stored.revoked_at}"
        roles = "a person" if stored.person is not None else ", ".join(stored.roles)
        click.echo(f"{stored.code}  {roles}  made {stored.created_at}{state}")


@token.command("revoke")
@click.argument("code")
def token_revoke(code: str) -> None:
    """Make the token CODE useless from the next request on."""
    from service.workflows.accounts import revoke_token

    revoke_token(_database(), code)
    click.echo(f"{code} is revoked.")
