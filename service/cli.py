"""The command ``tallyward``."""

from __future__ import annotations

import logging
import os
import sys
from datetime import UTC, datetime

import click

from service import __version__
from service.admin_key import kept_key
from service.serving import Running, ServingError, local_url
from service.serving import serve as serve_until_stopped
from service.settings import Settings, SettingsError
from service.store.errors import StoreError


class _Commands(click.Group):
    """The commands; `simulate` is imported when asked for: its numerics take a while to load."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return sorted([*super().list_commands(ctx), "simulate"])

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name == "simulate":
            from service.simulation.command import simulate

            return simulate
        return super().get_command(ctx, cmd_name)


@click.group(cls=_Commands)
@click.version_option(__version__, prog_name="tallyward")
def main() -> None:
    """Watch the digits of payment amounts, merchant by merchant.

    Settings are environment variables TALLYWARD_*; `tallyward settings` lists them.
    """


@main.command()
def settings() -> None:
    """List every setting with its default, range and effect."""
    for setting in Settings.table():
        click.echo(f"{setting.name}={setting.default}")
        click.echo(f"    {setting.effect} ({setting.range})")


@main.command()
@click.option("--demo", "with_demo", is_flag=True, help="Post the demo portfolio once it runs.")
def serve(with_demo: bool) -> None:
    """Run the service until interrupted.

    Without TALLYWARD_REDIS_URL, an embedded store is started under TALLYWARD_DATA.
    """
    chosen = _settings()
    logging.basicConfig(
        level=chosen.log_level.upper(), format="%(levelname)s %(name)s: %(message)s"
    )

    def ready(running: Running) -> None:
        if with_demo:
            if running.admin_key is None:
                click.echo("The demo needs TALLYWARD_ADMIN_KEY, so it was not posted.", err=True)
            else:
                _post_demo(running.url, running.admin_key)
        _announce(running)

    try:
        serve_until_stopped(chosen, ready)
    except (ServingError, StoreError) as error:
        raise click.ClickException(str(error)) from error


@main.command()
@click.option("--url", help="Where the service is; default: TALLYWARD_BIND on this machine.")
def demo(url: str | None) -> None:
    """Post the demo portfolio to a running service and say what it found.

    The key is TALLYWARD_ADMIN_KEY, or else the one kept in TALLYWARD_DATA. Posting again counts
    nothing twice.
    """
    chosen = _settings()
    try:
        key = chosen.admin_key or kept_key(chosen.data)
    except StoreError as error:
        raise click.ClickException(str(error)) from error
    if key is None:
        raise click.ClickException(
            f"no key: set TALLYWARD_ADMIN_KEY, or TALLYWARD_DATA to the service's data folder "
            f"(there is no key in {chosen.data.absolute()})"
        )
    if not _post_demo(url or local_url(chosen), key):
        sys.exit(1)


def _settings() -> Settings:
    try:
        return Settings.from_environment(os.environ)
    except SettingsError as error:
        click.echo(f"Error: {error}", err=True)
        sys.exit(2)


def _announce(running: Running) -> None:
    click.echo(f"Tallyward listens on {running.url} (open it to see what is there).")
    if running.key_file is not None:
        click.echo(f"The admin key is in {running.key_file}")
    elif running.admin_key is None:
        click.echo("No admin key is set: only keys made earlier are accepted.")
    click.echo("Stop it with Ctrl-C.")


def _post_demo(url: str, key: str) -> bool:
    from service.demo.connection import Refused, Unreachable
    from service.demo.run import Miscounted, run

    try:
        run(url, key, now=datetime.now(UTC), progress=sys.stderr.isatty(), out=click.echo)
    except (Refused, Unreachable, Miscounted, ValueError) as error:
        click.echo(f"The demo stopped: {error}", err=True)
        return False
    return True


if __name__ == "__main__":
    main(prog_name="tallyward")
