"""The command line: thin commands that import what they need only when they run."""

from __future__ import annotations

import sys

__all__ = ["main", "overall_help"]

COMMANDS = {
    "demo": "Write an invented absorber and measure it: the quickest real run.",
    "lines": "List transitions, and where they fall in a spectrum.",
    "inspect": "Show what the reader understood of a spectrum.",
    "draft": "Find covered and detected transitions and write a job.",
    "simulate": "Write synthetic spectra of the model of a job.",
    "calibrate": "Fit distortion terms of a wavelength scale.",
    "measure": "Fit jobs and write their result folders.",
}
"""Name and purpose of each command; each lives in the module of its name."""

_HELP = """Usage: fathomline [OPTIONS] COMMAND [ARGS]...

  Measure Δα/α, the relative change of the fine-structure constant, in quasar
  absorbers.

Options:
  --version   Show the version and exit.
  -h, --help  Show this message and exit.

Commands:
{commands}

Examples:
  fathomline demo halden-a
  fathomline lines --ion "Fe II" --redshift 1.15
  fathomline inspect spectrum.fits
  fathomline measure absorber.toml

Each command has --help of its own.
"""


def overall_help() -> str:
    """What ``fathomline --help`` prints."""
    width = max(len(name) for name in COMMANDS)
    return _HELP.format(
        commands="\n".join(f"  {name:<{width}}  {text}" for name, text in COMMANDS.items())
    )


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and exit.

    Parameters
    ----------
    arguments : list of str, optional
        Default: those of the process.

    """
    given = sys.argv[1:] if arguments is None else arguments
    if given in ([], ["-h"], ["--help"]):
        # answered here: importing even the command-line package takes three times as long
        sys.stdout.write(overall_help())
        sys.exit(0 if given else 2)
    from fathomline.cli.main import run

    sys.exit(run(given))
