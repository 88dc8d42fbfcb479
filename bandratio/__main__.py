"""The command line: ``bandratio WORD …``, one module of :mod:`bandratio.commands` for each word."""

from __future__ import annotations

import importlib
import sys
from pathlib import Path

import click

__all__ = ["main"]

_FOLDER = Path(__file__).with_name("commands")


class _Words(click.Group):
    """Finds the words in the commands folder and imports only the one that is asked for."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002 (the name is click's)
        return sorted(file.stem for file in _FOLDER.glob("[a-z]*.py"))

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in self.list_commands(ctx):
            return None
        command: click.Command = importlib.import_module(f"bandratio.commands.{cmd_name}").command
        return command


@click.command(cls=_Words, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.version_option(package_name="bandratio")
def words() -> None:
    """Spectral parameters of airless bodies, each with a standard uncertainty."""


def main(arguments: list[str] | None = None) -> None:
    """Run one command; bad input is answered with one line on standard error and exit code 2."""
    try:
        exit_code = words.main(args=arguments, prog_name="bandratio", standalone_mode=False)
    except click.exceptions.Abort:
        click.echo("bandratio: stopped", err=True)
        sys.exit(130)
    except click.exceptions.NoArgsIsHelpError as error:
        click.echo(error.format_message())
        sys.exit(2)
    except click.ClickException as error:
        click.echo(f"bandratio: {' '.join(error.format_message().split())}", err=True)
        sys.exit(2)
    except (ValueError, TypeError, OSError, KeyError) as error:
        text = error.args[0] if isinstance(error, KeyError) and error.args else error
        click.echo(f"bandratio: {' '.join(str(text).split())}", err=True)
        sys.exit(2)
    sys.exit(exit_code if isinstance(exit_code, int) else 0)


if __name__ == "__main__":
    main()
