"""A search while it runs: one quiet block on standard error, and only where that is a terminal."""

from __future__ import annotations

import time
from types import TracebackType

from rich.console import Console
from rich.live import Live
from rich.text import Text

from synth.search.outcome import Progress
from synth.wording.figures import percent

BAR = 24
OFTEN = 0.1  # seconds between two looks
LATE = 0.4  # seconds before anything is shown: a quick run shows nothing


class Watch:
    """Shows what `Progress` says; used as a context manager round a run."""

    def __init__(self, console: Console) -> None:
        self._console = console
        self._live: Live | None = None
        self._begun = self._last = time.monotonic()

    def __enter__(self) -> Watch:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, fault: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._live is not None:
            self._live.stop()

    def __call__(self, progress: Progress) -> None:
        """Take a look; cheap when called too often."""
        now = time.monotonic()
        seen = self._console.is_terminal and not self._console.is_dumb_terminal
        if not seen or now - self._begun < LATE or now - self._last < OFTEN:
            return
        self._last = now
        if self._live is None:
            self._live = Live(console=self._console, transient=True, auto_refresh=False)
            self._live.start()
        self._live.update(drawn(progress), refresh=True)


def drawn(progress: Progress) -> Text:
    """One look, as text: how far, and the best slack of each structure so far."""
    share = min(1.0, progress.evaluations / max(1, progress.expected))
    full = round(BAR * share)
    text = Text.assemble(
        ("━" * full, "name"),
        ("─" * (BAR - full), "dim"),
        f"  {progress.stage}  ",
        (f"{progress.evaluations:,} loops, {progress.seconds:.1f} s; Ctrl-C keeps the best so far", "dim"),
    )
    if progress.best is not None:
        name, slack = progress.best
        text.append("\nbest so far  ")
        text.append(f"{name} {percent(slack)}", style="good" if slack >= 0.0 else "")
    others = sorted(progress.structures.items(), key=lambda item: -item[1])
    if others:
        text.append("\n" + "  ".join(f"{name} {percent(slack)}" for name, slack in others[:6]), style="dim")
    return text
