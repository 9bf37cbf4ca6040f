"""What a person sees while the work is done: a bar on a terminal, only the outcome in a pipe."""

import sys
import time
from pathlib import Path
from types import TracebackType
from typing import IO, Any, Self

from .errors import UnusableInputError

__all__ = ["Reporter"]


class Reporter:
    """Takes (stage, share done); prints nothing but the closing lines where there is no terminal."""

    def __init__(self, *, quiet: bool, log: Path | None) -> None:
        self.quiet, self.start = quiet, time.monotonic()
        self.bar: Any = None
        self.task: Any = None
        try:
            self.log: IO[str] | None = log.open("a", encoding="utf-8") if log else None
        except OSError as refused:
            msg = f"--log: {log} cannot be written ({refused.strerror})"
            raise UnusableInputError(msg) from refused

    def __enter__(self) -> Self:
        if not self.quiet and sys.stderr.isatty():
            from rich.console import Console  # noqa: PLC0415 - only a terminal needs it
            from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn  # noqa: PLC0415

            self.bar = Progress(
                TextColumn("{task.description:>10}"), BarColumn(), TextColumn("{task.percentage:>3.0f} %"),
                TimeRemainingColumn(), console=Console(stderr=True), transient=True,
            )  # fmt: skip
            self.bar.start()
            self.task = self.bar.add_task("start", total=1.0)
        return self

    def __call__(self, stage: str, share: float) -> None:
        """Show a stage."""
        if self.bar:
            self.bar.update(self.task, description=stage, completed=share)
        self._write(f"{time.monotonic() - self.start:9.2f} s  {stage}")

    def done(self, lines: list[str]) -> None:
        """Print the closing lines."""
        if self.bar:
            self.bar.stop()
            self.bar = None
        for line in lines:
            self._write(line)
            if not self.quiet:
                print(line)

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        if self.bar:
            self.bar.stop()
        if error is not None:
            self._write(f"failed: {error}")
        if self.log:
            self.log.close()

    def _write(self, line: str) -> None:
        if self.log:
            self.log.write(line + "\n")
            self.log.flush()
