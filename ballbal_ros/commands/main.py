"""``ballbal``: the one command. Exit status 0: done and within limits; 1: done but outside limits; 2: the input is
wrong.
"""

from __future__ import annotations

import os
import sys
from typing import Any, get_type_hints

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import typer

from ballbal_ros.commands.checkup import checkup_command
from ballbal_ros.commands.faults import faults_command
from ballbal_ros.commands.gains import gains_command
from ballbal_ros.commands.headless import headless_command
from ballbal_ros.commands.inspect import inspect_command
from ballbal_ros.commands.rehearse import rehearse_command
from ballbal_ros.commands.stream import stream_command
from ballbal_ros.commands.weigh_in import weigh_in_command
from ballbal_ros.errors import BallbalError

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    help="Balance and arm compensation for a mobile manipulator that stands on one rolling ball.",
)
for _name, _command in (
    ("inspect", inspect_command),
    ("gains", gains_command),
    ("rehearse", rehearse_command),
    ("stream", stream_command),
    ("headless", headless_command),
    ("faults", faults_command),
    ("checkup", checkup_command),
    ("weigh-in", weigh_in_command),
):
    # typer 0.9, Ubuntu 24.04's, does not look behind annotations that are text.
    _command.__annotations__ = get_type_hints(_command, include_extras=True)
    app.command(_name)(_command)


# The base of all complaints about a command line; typer carries it, but does not name it in every version.
_UsageError: Any = next(cls for cls in typer.BadParameter.__mro__ if cls.__name__ == "ClickException")


def main() -> None:
    """Run the command line; wrong input is one line on standard error and exit status 2."""
    try:
        sys.exit(app(standalone_mode=False))
    except typer.Exit as leaving:
        sys.exit(leaving.exit_code)
    except _UsageError as error:
        print(f"ballbal: {' '.join(error.format_message().split())}", file=sys.stderr)
        sys.exit(2)
    except BallbalError as error:
        print(f"ballbal: {error}", file=sys.stderr)
        sys.exit(2)
    except (KeyboardInterrupt, typer.Abort):
        print("ballbal: interrupted", file=sys.stderr)
        sys.exit(130)


if __name__ == "__main__":
    main()
