"""Pictures that commands draw: a file's name is checked before the work, and what keeps it from being drawn is told."""

from __future__ import annotations

import contextlib
from collections.abc import Iterator
from pathlib import Path

from ballbal_ros.errors import BallbalError

_PICTURES = (".png", ".svg", ".pdf")


def check_picture(figure: Path | None) -> None:
    """Raise :class:`BallbalError` for a file name that is no picture's."""
    if figure is not None and figure.suffix.lower() not in _PICTURES:
        raise BallbalError("--figure", f"{figure} is no picture's name", f"let it end in {', '.join(_PICTURES)}")


@contextlib.contextmanager
def drawing(figure: Path) -> Iterator[None]:
    """While a picture is drawn, its drawing code's import included: raises :class:`BallbalError` where it can't be."""
    try:
        yield
    except ImportError as error:
        what = f"needs matplotlib, which is not there ({error})"
        raise BallbalError("--figure", what, "install the headless extra") from error
    except OSError as error:
        what = f"can't be written: {error.strerror}"
        raise BallbalError(str(figure), what, "give the path of a file to write") from error
