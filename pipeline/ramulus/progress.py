"""What a person sees while the work is done: a bar on a terminal, only the outcome in a pipe."""

import logging
import sys
import time
from collections.abc import Iterable
from pathlib import Path
from types import TracebackType
from typing import Any, Self

from .errors import UnusableInputError

__all__ = ["Reporter"]

_LOGGER = logging.getLogger("ramulus")


class Reporter:
    """Take each stage and the share of the work before it; print nothing but the closing lines.

    On a terminal a bar shows the stage and the time left.

    Parameters
    ----------
    quiet : bool
        Print nothing.
    log : Path or None
        A file that is given every stage, closing line and error with its time, at its end.

    Raises
    ------
    UnusableInputError
        If the file cannot be written.
    """

    def __init__(self, *, quiet: bool = False, log: Path | None = None) -> None:
        self.quiet, self.start = quiet, time.monotonic()
        self.bar: Any = None
        self.task: Any = None
        self.handler: logging.Handler = logging.NullHandler()
        if log:
            try:
                self.handler = logging.FileHandler(log, encoding="utf-8", errors="backslashreplace")
            except OSError as refused:
                msg = f"--log: {log} cannot be written ({(refused.strerror or '').lower()})"
                raise UnusableInputError(msg) from refused
            self.handler.setFormatter(logging.Formatter("%(asctime)s %(levelname)s %(message)s"))
        self.level = _LOGGER.level

    def __enter__(self) -> Self:
        # At the root, so that what libraries say goes to the log too, and never to the terminal.
        logging.getLogger().addHandler(self.handler)
        logging.captureWarnings(capture=True)
        _LOGGER.setLevel(logging.INFO)
        if not self.quiet and sys.stderr.isatty():
            self._open_bar()
        return self

    def __call__(self, stage: str, share: float) -> None:
        """Show and log a stage; `share` of the expected time lies before it."""
        if self.bar:
            spent = time.monotonic() - self.start
            left = f"{spent * (1 / share - 1):.0f} s left" if 0.02 < share < 1 else ""
            self.bar.update(self.task, description=stage, completed=share, left=left)
        _LOGGER.info("%s", stage)

    def done(self, lines: Iterable[str]) -> None:
        """Print and log the closing lines."""
        self._close_bar()
        for line in lines:
            _LOGGER.info("%s", line)
            if not self.quiet:
                print(line)  # noqa: T201 - what the command is for

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._close_bar()
        if error is not None and not isinstance(error, SystemExit):
            _LOGGER.error("%s: %s", type(error).__name__, error)
        logging.getLogger().removeHandler(self.handler)
        logging.captureWarnings(capture=False)
        _LOGGER.setLevel(self.level)
        self.handler.close()

    def _open_bar(self) -> None:
        # Only a terminal needs it.
        from rich.console import Console  # noqa: PLC0415
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn  # noqa: PLC0415

        self.bar = Progress(
            TextColumn("{task.description:>10}"), BarColumn(),
            TextColumn("{task.percentage:>3.0f} %"), TimeElapsedColumn(),
            TextColumn("{task.fields[left]}"), console=Console(stderr=True), transient=True,
        )  # fmt: skip
        self.bar.start()
        self.task = self.bar.add_task("start", total=1.0, left="")

    def _close_bar(self) -> None:
        if self.bar:
            self.bar.stop()
            self.bar = None
