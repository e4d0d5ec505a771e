"""How far a run is: a bar on a terminal, lines elsewhere, JSON lines for scripts."""

from __future__ import annotations

import time
from types import TracebackType
from typing import TYPE_CHECKING, ClassVar

from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

from elbowroom.cli.screen import Screen, readable_seconds

if TYPE_CHECKING:
    from elbowroom.job.engine.items import WorkItem

LINE_SECONDS = 20.0
"""Between two lines about something that takes long [s]."""

JSON_SECONDS = 10.0
"""Between two JSON lines about a run in which nothing ends [s]."""

UNFINISHED = 0.95
"""A unit that takes longer than predicted counts as done by no more than this."""


class RunProgress:
    """Progress of some items, weighed by their predicted seconds.

    Parameters
    ----------
    screen : Screen
        Where it is told.
    items : sequence of WorkItem
        All of them.
    workers : int
        Items at a time.
    """

    SHARES: ClassVar = {"assemble": (0.0, 0.25), "factorise": (0.25, 0.55), "port excitations": (0.8, 0.2)}

    def __init__(self, screen: Screen, items: list[WorkItem], workers: int) -> None:
        self.screen, self.workers = screen, workers
        self.seconds = {item.number: item.seconds for item in items}
        self.total = sum(self.seconds.values()) or 1.0
        self.all = sum(len(item.frequencies_hz) for item in items)
        self.finished = self.failed = 0
        self.done = self.taken = self.foreseen = 0.0
        self.since: dict[int, float] = {}
        self.stage_reached: dict[int, float] = {}
        self.begun: dict[int, dict[float, float]] = {}
        self.sizes = {item.number: len(item.frequencies_hz) for item in items}
        self.start = self.last_line = self.last_json = time.monotonic()
        self.bar: Progress | None = None
        if screen.mode == "normal" and screen.out.is_terminal:
            self.bar = Progress(
                TextColumn("{task.description}"), BarColumn(), TextColumn("{task.percentage:>3.0f}%"), TimeElapsedColumn(),
                TextColumn("left {task.fields[left]}"), console=screen.out, transient=True,
            )  # fmt: skip
            self.task = self.bar.add_task("solving", total=self.total, left="?")

    def __enter__(self) -> RunProgress:
        """Show the bar."""
        if self.bar is not None:
            self.bar.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None) -> None:
        """Take the bar away."""
        if self.bar is not None:
            self.bar.stop()

    @property
    def running(self) -> list[int]:
        """Numbers of the items being worked on: the first that were given to the workers; others wait in a scheduler's queue."""
        return list(self.since)[: self.workers]

    @property
    def reached(self) -> float:
        """Predicted seconds of what is done; units still running count by what finished ones took against their predictions."""
        now, part = time.monotonic(), 0.0
        pace = self.taken / self.foreseen if self.foreseen else 1.0
        for number in self.running:
            whole = self.seconds.get(number, 0.0)
            if number in self.stage_reached:
                part += self.stage_reached[number] * whole
            else:
                part += min((now - self.since[number]) / pace, UNFINISHED * whole)
        return min(self.done + part, self.total)

    @property
    def left_seconds(self) -> float:
        """Time left [s]: at the pace so far, or as predicted while there is none."""
        elapsed, reached = time.monotonic() - self.start, self.reached
        if reached < 0.02 * self.total:
            return (self.total - reached) / self.workers
        return (self.total - reached) * elapsed / reached

    def counts(self) -> dict[str, float]:
        """Return what JSON lines say of the whole run."""
        return {
            "finished": self.finished, "running": len(self.running), "failed": self.failed, "units": self.all,
            "fraction_of_all": self.reached / self.total, "left_seconds": self.left_seconds,
        }  # fmt: skip

    def summary(self) -> str:
        """Return the state of the run in a few words."""
        parts = [f"{self.finished} of {self.all} done"]
        parts += [f"{len(self.running)} running"] if self.since else []
        parts += [f"{self.failed} failed"] if self.failed else []
        return ", ".join(parts)

    def started(self, item: WorkItem) -> None:
        """Count an item as running."""
        if not self.since and not self.finished and not self.failed:
            self.start = time.monotonic()
        self.since[item.number] = time.monotonic()
        self._show("")

    def stage(self, frequency_hz: float, stage: str, fraction: float) -> None:
        """Move on inside a unit that this process works on."""
        number = next(iter(self.since), -1)  # this process does one item at a time
        start, share = self.SHARES.get(stage, (0.0, 0.0))
        begun = self.begun.setdefault(number, {})
        begun[frequency_hz] = start + share * fraction
        # Of an item with several frequencies, those begun before are finished.
        before = len(begun) - 1
        self.stage_reached[number] = (before + begun[frequency_hz]) / self.sizes.get(number, 1)
        label = f"{frequency_hz / 1e6:g} MHz: {stage}"
        if self.bar is not None:
            self._show(label)
        elif self.screen.mode == "normal" and (fraction >= 1.0 or time.monotonic() - self.last_line > LINE_SECONDS):
            self.last_line = time.monotonic()
            self.screen.say(f"  {label} {fraction:.0%} ({self.reached / self.total:.0%} of all)")
        if fraction >= 1.0:
            self.screen.emit("progress", frequency_hz=frequency_hz, stage=stage, **self.counts())

    def ended(self, item: WorkItem, seconds: float, failed: int) -> None:
        """Count the units of an item as finished, some as failed, however long it took [s]."""
        told = item.number in self.stage_reached
        before = set(self.running)
        self.since.pop(item.number, None)
        self.stage_reached.pop(item.number, None)
        self.since |= {number: time.monotonic() for number in self.running if number not in before}
        if not failed:
            self.taken += seconds
            self.foreseen += self.seconds.get(item.number, 0.0)
        self.done += self.seconds.get(item.number, 0.0)
        self.finished += len(item.frequencies_hz) - failed
        self.failed += failed
        if not told and self.screen.mode == "normal" and self.bar is None:
            self.last_line = time.monotonic()
            left = "" if self.finished + self.failed == self.all else f", {readable_seconds(self.left_seconds)} left"
            state = "failed" if failed else f"solved in {readable_seconds(seconds)}"
            self.screen.say(f"  {item.label}: {state} ({self.summary()}{left})")
        if not told:
            self.last_json = time.monotonic()
            self.screen.emit("progress", **self.counts())
        self._show("")

    def again(self, item: WorkItem) -> None:
        """Count an item as waiting once more."""
        self.since.pop(item.number, None)

    def tick(self) -> None:
        """Tell how far it is, if nothing has been told for a while."""
        now = time.monotonic()
        self._show("")
        if self.bar is None and self.screen.mode == "normal" and self.since and now - self.last_line > LINE_SECONDS:
            self.last_line = now
            self.screen.say(f"  {self.summary()}, {readable_seconds(self.left_seconds)} left")
        if self.since and now - self.last_json > JSON_SECONDS:
            self.last_json = now
            self.screen.emit("progress", **self.counts())

    def _show(self, label: str) -> None:
        if self.bar is not None:
            words = self.summary() if self.all > 1 else ""
            description = ": ".join(part for part in (words, label) if part) or "solving"
            self.bar.update(self.task, completed=self.reached, description=description, left=readable_seconds(self.left_seconds))
