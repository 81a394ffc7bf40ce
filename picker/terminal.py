"""What all commands share at the terminal: exit statuses, tables, and how findings are told.

Results go to standard output, progress and messages to standard error.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from picker.errors import InputError

if TYPE_CHECKING:
    from picker.findings import Finding

EXIT_FINDINGS = 1
EXIT_INPUT = 2
EXIT_STOPPED = 130
ROWS_SHOWN = 60
ROWS_SHOWN = 60
_PLACES_SHOWN = 4
_SHOW_TRACEBACK = "ROCKHEAD_TRACEBACK"


class CommandGroup(click.Group):
    """A group of commands whose exit status is 0 done, 1 findings to look at, 2 unusable input, 130 stopped."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run a command; what could not be used becomes one message and status 2."""
        try:
            return super().invoke(ctx)
        except InputError as error:
            raise _Unusable(str(error)) from error
        except click.UsageError:
            raise
        except click.ClickException as error:
            raise _Unusable(error.format_message()) from error
        except BrokenPipeError:
            raise
        except sqlite3.Error as error:
            raise _Unusable(f"the survey file is damaged ({error}). Put a copy in its place.") from error
        except OSError as error:
            place = f"{error.filename}: " if error.filename else ""
            raise _Unusable(f"{place}{error.strerror or error}.") from error
        except (KeyboardInterrupt, click.Abort):
            click.echo("Stopped. What was reported as done is kept.", err=True)
            ctx.exit(EXIT_STOPPED)
        except click.exceptions.Exit:
            raise
        except Exception as error:
            if os.environ.get(_SHOW_TRACEBACK):
                raise
            raise _Unusable(
                f"a fault in rockhead itself ({type(error).__name__}: {error}). What was reported as done is kept. "
                f"Run the command again with {_SHOW_TRACEBACK}=1 in the environment to see where, and report it."
            ) from error


class _Unusable(click.ClickException):
    """What click prints as `Error: ...` and ends with status 2."""

    exit_code = EXIT_INPUT


def survey_argument(command: Any) -> Any:
    """Give a command its first argument, the survey file."""
    return click.argument("survey", type=click.Path(path_type=Path))(command)


def units_option(command: Any) -> Any:
    """Give a command its option for feet."""
    choice = click.Choice(["m", "ft"])
    return click.option("--units", type=choice, default="m", show_default=True, help="Lengths in metres or feet.")(
        command
    )


def table_lines(header: tuple[str, ...], rows: Sequence[tuple[str, ...]]) -> list[str]:
    """Lines of a table, columns aligned to the right."""
    widths = [max(len(row[column]) for row in [header, *rows]) for column in range(len(header))]
    return ["  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True)) for row in [header, *rows]]


def echo_findings(findings: Sequence[Finding]) -> None:
    """Print findings to standard output, those that say the same of several places once."""
    places: dict[tuple[str, str, str], list[str]] = {}
    for finding in sorted(findings, key=lambda one: one.severity != "look"):
        where = ", ".join(
            [Path(finding.file).name] * bool(finding.file)
            + [f"record {finding.record}"] * (finding.record is not None)
            + [f"channel {finding.channel}"] * (finding.channel is not None)
        )
        places.setdefault((finding.severity, finding.text, finding.proposal), []).append(where)
    for (severity, text, proposal), where_all in places.items():
        where = "; ".join(where_all[:_PLACES_SHOWN])
        if len(where_all) > _PLACES_SHOWN:
            where += f" and {len(where_all) - _PLACES_SHOWN} more"
        place = f" {where}:" if where else ""
        click.echo(f"{'LOOK' if severity == 'look' else 'Note'}{place} {text} {proposal}".rstrip())


def needs_a_look(findings: Sequence[Finding]) -> bool:
    """Whether a person must look at any of the findings."""
    return any(finding.severity == "look" for finding in findings)


def count_words(number: int, what: str) -> str:
    """Number of things in words."""
    return f"{number} {what}" if number == 1 else f"{number} {what}s"
