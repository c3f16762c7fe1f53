"""What a running fit says about itself."""

from __future__ import annotations

import sys
from dataclasses import dataclass
from typing import Any, Protocol, Self, TextIO

__all__ = ["Progress", "ProgressBar", "ProgressReport", "progress_bar"]


@dataclass(frozen=True)
class ProgressReport:
    """State of a run.

    Parameters
    ----------
    steps : int
        Steps done, of the slowest replica.
    aim : int
        Steps after which the chain is judged again.
    tau, ess, rhat : float
        Largest autocorrelation time, smallest effective sample size, largest R-hat at the last check; NaN before the first.
    seconds_left : float
        Estimated time to the aim, NaN while unknown.
    """

    steps: int
    aim: int
    tau: float
    ess: float
    rhat: float
    seconds_left: float


class Progress(Protocol):
    """Anything that can be told about progress, a function for instance."""

    def __call__(self, report: ProgressReport) -> None: ...


class ProgressBar:
    """A bar on a terminal: steps, τ, effective sample size, time left. Close it at the end."""

    def __init__(self, stream: TextIO | None = None) -> None:
        from tqdm import tqdm

        self._bar = tqdm(
            total=1,
            unit="step",
            file=stream or sys.stderr,
            leave=False,
            dynamic_ncols=True,
            bar_format="{desc} |{bar}| {n_fmt}/{total_fmt} steps{postfix}",
        )

    def __call__(self, report: ProgressReport) -> None:
        bar = self._bar
        bar.total = max(report.aim, 1)
        bar.n = min(report.steps, bar.total)
        bar.set_description_str("sampling", refresh=False)
        facts = []
        if report.tau == report.tau:
            facts += [f"τ = {report.tau:.1f}", f"ESS = {report.ess:,.0f}", f"R̂ = {report.rhat:.3f}"]
        if report.seconds_left == report.seconds_left:
            facts.append(f"{report.seconds_left:.0f} s left")
        bar.set_postfix_str(", ".join(facts), refresh=False)
        bar.refresh()

    def close(self) -> None:
        """Take the bar off the terminal."""
        self._bar.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: Any) -> None:
        self.close()


class _Silent:
    """Says nothing."""

    def __call__(self, report: ProgressReport) -> None:
        pass

    def close(self) -> None:
        pass

    def __enter__(self) -> _Silent:
        return self

    def __exit__(self, *_: Any) -> None:
        pass


def progress_bar(quiet: bool = False, stream: TextIO | None = None) -> _Silent | ProgressBar:
    """Return a bar, or something silent if `quiet` or if `stream` (default stderr) is no terminal.

    Either is a context manager.
    """
    stream = stream or sys.stderr
    return _Silent() if quiet or not stream.isatty() else ProgressBar(stream)
