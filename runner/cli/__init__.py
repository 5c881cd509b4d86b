"""The command line. Commands are imported when they are used, so that ``--help`` is quick."""

from __future__ import annotations

import os
import sys
from importlib import import_module

import click

INTERRUPTED = 130
# name: module, one line of help. The order is that of a session.
COMMANDS = {
    "demo": ("plan", "Copy the invented example and take it through every step."),
    "init": ("plan", "Write a commented protocol, lab and coil file to start from."),
    "targets": ("look", "List the targets of a protocol: place, depth, direction."),
    "place": ("plan", "Turn targets and region into coil poses."),
    "schedule": ("plan", "Draw the pulse order and freeze the plan."),
    "dry-run": ("plan", "Hold a session against every limit; no device touched."),
    "export": ("poses", "Write a pose list for a positioning system."),
    "import": ("poses", "Read poses back into a table."),
    "compare": ("poses", "Say how far two pose lists are apart."),
    "field": ("look", "Compute the field of each pose at given points."),
    "coils": ("look", "List the built-in coils."),
    "limits": ("look", "Print every published limit with its source."),
    "schema": ("look", "Print the JSON Schema of a file, for editors."),
}
LATER = ("run", "resume", "audit", "scalp", "register", "design", "report")
_ATTRIBUTES = {"dry-run": "dry_run_command", "import": "import_command"}


class LazyGroup(click.Group):
    """A group that knows its commands by name and imports one when it is called."""

    def list_commands(self, ctx: click.Context) -> list[str]:  # noqa: ARG002 - click's signature
        """Return the names in the order of a session."""
        return list(COMMANDS)

    def get_command(self, ctx: click.Context, cmd_name: str) -> click.Command | None:  # noqa: ARG002 - click's signature
        """Import a command."""
        if cmd_name not in COMMANDS:
            return None
        module = import_module(f".{COMMANDS[cmd_name][0]}", __package__)
        command: click.Command = getattr(module, _ATTRIBUTES.get(cmd_name, f"{cmd_name}_command"))
        return command

    def resolve_command(
        self, ctx: click.Context, args: list[str]
    ) -> tuple[str | None, click.Command | None, list[str]]:
        """Suggest the nearest command when one is not known."""
        if args and args[0] not in COMMANDS and not args[0].startswith("-"):
            from coilwright.geometry.errors import did_you_mean

            if args[0] in LATER:
                ctx.fail(f"{args[0]!r} is not in this version yet")
            ctx.fail(f"no command {args[0]!r}{did_you_mean(args[0], COMMANDS)}")
        return super().resolve_command(ctx, args)

    def format_commands(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:  # noqa: ARG002
        """List the commands without importing them."""
        with formatter.section("Commands"):
            formatter.write_dl([(name, text) for name, (_, text) in COMMANDS.items()])


@click.group(cls=LazyGroup, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="coilwright")
def cli() -> None:
    """From cortical targets and field directions to coil poses and checked schedules.

    coilwright does not replace local rules, ethics approval, a trained operator or the device's own safety. Not
    assessed or marked as a medical device; the user's institution decides.

    Example: coilwright demo my-first-session
    """


def main() -> None:
    """Run the command line; bad input is one line each on standard error and exit code 2."""
    from coilwright.geometry.errors import InputError

    code = 0
    try:
        # Not cli(...): click turns a reader that goes away into exit code 1, which means a fault in the program.
        with cli.make_context("coilwright", sys.argv[1:]) as context:
            cli.invoke(context)
        sys.stdout.flush()
    except click.exceptions.Exit as done:
        code = done.exit_code
    except InputError as error:
        for line in error.lines:
            click.echo(f"error: {line}", err=True)
        code = 2
    except (KeyboardInterrupt, click.exceptions.Abort):
        click.echo("interrupted", err=True)
        code = INTERRUPTED
    except click.ClickException as error:
        error.show()
        code = error.exit_code
    except BrokenPipeError:  # the reader has gone; what it did not read may have been the verdict
        sys.stdout = open(os.devnull, "w")  # noqa: PTH123, SIM115 - held until the program ends, so that nothing is flushed
        code = INTERRUPTED
    sys.exit(code)
