"""Progress on a terminal: paths done, the error so far, the time still needed. It vanishes when the work is done."""

from __future__ import annotations

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn


class Bar:
    """A context manager whose `progress` and `notice` are handed to the verbs."""

    def __init__(self) -> None:
        columns = (TextColumn("{task.completed:,} of {task.total:,} paths"), BarColumn(), TimeRemainingColumn(),
                   TextColumn("{task.description}"))
        self._shown = Progress(*columns, console=Console(stderr=True), transient=True)
        self._task = None

    def __enter__(self) -> Bar:
        self._shown.start()
        return self

    def __exit__(self, *error: object) -> None:
        self._shown.stop()

    def progress(self, done: int, planned: int, error: float) -> None:
        """Called after each batch with the standard error so far."""
        said = f"standard error {error:.3g}"
        if self._task is None:
            self._task = self._shown.add_task(said, total=planned)
        self._shown.update(self._task, completed=done, total=planned, description=said)
        if done >= planned:  # the next contract begins its own
            self._shown.remove_task(self._task)
            self._task = None

    def notice(self, text: str) -> None:
        self._shown.console.print(text, highlight=False)
