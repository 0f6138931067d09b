"""The group of commands; each one is loaded when it is called."""

from __future__ import annotations

from importlib import import_module

import click

from spectral import __version__

from .outcome import SAFETY

#: Name of each command, which is also that of its module, and what it does.
COMMANDS: dict[str, str] = {
    "demo": "Run the main job on a built-in scenario, truth known.",
    "check": "Say whether a scan is fit for use, and what is wrong with it.",
    "thresholds": "Turn threshold settings into keV, pixel by pixel.",
    "calibrate": "Learn every pixel's response from a wedge scan.",
    "refresh": "Bring a calibration up to date with a short scan.",
    "compare": "Say what changed between two calibrations.",
    "decompose": "Turn counts into maps of g/cm2 with errors and flags.",
    "simulate": "Count the scan that a script describes on a virtual detector.",
    "report": "Write pictures and tables about a scan, a calibration or maps.",
}


class CommandsOnCall(click.Group):
    """A group that loads a command's module when the command is named."""

    def list_commands(self, ctx: click.Context) -> list[str]:
        """Names in the order of the work."""
        del ctx
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:
        """Return the command of that name, None if there is none."""
        del ctx
        if cmd_name not in COMMANDS:
            return None
        module = import_module(f".commands.{cmd_name}", __package__)
        command = getattr(module, cmd_name)
        return command if isinstance(command, click.Command) else None

    def format_commands(
        self, ctx: click.Context, formatter: click.HelpFormatter
    ) -> None:
        """Write the list of commands without loading any of them."""
        del ctx
        with formatter.section("Commands"):
            formatter.write_dl(list(COMMANDS.items()))


@click.group(
    cls=CommandsOnCall,
    epilog=SAFETY,
    context_settings={"help_option_names": ["-h", "--help"]},
)
@click.version_option(__version__, prog_name="wedgewright")
def main() -> None:
    """Turn counts above several thresholds into maps of material in g/cm2.

    SCAN is a NeXus file (HDF5), or a scan script (TOML) that points to image files.
    A command ends with 0 when it is done, 1 when the data do not allow it, and 2 when
    it was called in a way that cannot be.
    """
