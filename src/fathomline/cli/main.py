"""Finds the command, turns errors into messages and exit codes.

Exit codes: 0 success; 1 a defect of the program; 2 a user's mistake, told in one message; 3
finished, but the result is flagged as not trustworthy; 130 interrupted.
"""

from __future__ import annotations

import importlib
import os
import sys
from typing import Any

import click

import fathomline
from fathomline.cli import COMMANDS, overall_help
from fathomline.errors import FathomlineError, JobError

__all__ = ["run"]


class _LateGroup(click.Group):
    """A group whose commands live in one module each, imported when needed."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        if cmd_name not in COMMANDS:
            return None
        module = importlib.import_module(f"fathomline.cli.{cmd_name}")
        command: click.Command = getattr(module, cmd_name)
        return command

    def get_help(self, ctx: click.Context) -> str:
        return overall_help().rstrip()


@click.group(cls=_LateGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(fathomline.__version__, prog_name="fathomline")
def _group() -> None:
    """Measure Δα/α, the relative change of the fine-structure constant, in quasar absorbers."""


def run(arguments: list[str]) -> int:
    """Run one command and return the exit code.

    Parameters
    ----------
    arguments : list of str
        Without the name of the program.

    """
    # numpy is not imported yet. Its threads slow the small matrices of a fit down, several times
    # so when other work shares the cores; whoever wants them sets the variable.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    try:
        outcome: Any = _group.main(args=arguments, prog_name="fathomline", standalone_mode=False)
    except click.exceptions.Abort:
        print("interrupted", file=sys.stderr)
        return 130
    except click.ClickException as error:
        error.show()
        return 2
    except JobError as error:
        for fault in error.faults:
            print(f"error: {fault}", file=sys.stderr)
        return 2
    except FathomlineError as error:
        print(f"error: {error}", file=sys.stderr)
        return 2
    except KeyboardInterrupt:
        print("interrupted", file=sys.stderr)
        return 130
    return outcome if isinstance(outcome, int) else 0
