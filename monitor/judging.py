"""A recording judged as a watch would have judged it: the same engine, the same lines, the sample index for a clock."""

import argparse
from types import TracebackType
from typing import Any, Self

from monitor.alarm_rules import AlarmRule
from monitor.capture import Capture
from monitor.engine import Engine, EngineOptions
from monitor.errors import printable
from monitor.journal import Journal, Keeper
from monitor.linkfile import LinkOptions
from monitor.running import chain_options, open_capture, open_journal, start_fields
from monitor.sources import Source
from monitor.state import LiveState
from monitor.terminal import say


class Judged:
    """Feeds an engine beside the replay's own chain, and keeps its journal; a context.

    ``keeper`` and ``capture``, where given, are the caller's; else they are opened as the arguments say, and closed at the end.
    ``history`` keeps the opening's course.
    """

    def __init__(
        self,
        parsed: argparse.Namespace,
        source: Source,
        link: LinkOptions,
        rules: tuple[AlarmRule, ...],
        *,
        keeper: Keeper | None = None,
        capture: Capture | None = None,
        history: bool = False,
    ) -> None:
        self._own: Journal | None = None
        if keeper is None:
            capture = open_capture(parsed, lambda text: say(f"warning: {text}"), live=False)
            keeper = self._own = open_journal(parsed, capture)
        self._journal = keeper
        self._start = start_fields(parsed.source, link, rules)
        self._engine = Engine(
            link.wanted(),
            sample_rate_hz=source.info.sample_rate_hz,
            complex_in=source.info.complex_samples,
            options=EngineOptions(
                window=parsed.window,
                every_s=parsed.every,
                rules=rules,
                display=False,
                history=history,
                chain=chain_options(parsed, link),
            ),
            line=self._journal.write,
            source_text=parsed.source,
            tap=capture,
        )
        self._ended = False
        if capture is not None:
            info = source.info
            capture.describe(info.sample_rate_hz, complex_in=info.complex_samples, centre_hz=info.centre_hz)
            capture.picture = lambda: self._engine.state().snapshot
        self.feed = self._engine.feed

    def __enter__(self) -> Self:
        self._journal.write("start", 0, 0.0, self._start)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        try:
            if not self._ended:
                self._last_line(printable(str(error)) or "interrupted" if error is not None else "interrupted")
        finally:
            if self._own is not None:
                self._own.close()

    def finish(self, *, interrupted: bool = False) -> list[dict[str, Any]]:
        """The stream has ended; returns the alarms that there were. Raises InputError."""
        self._engine.finish()
        self._last_line("interrupted" if interrupted else "the recording ended")
        return self._engine.alarms.record()

    def state(self) -> LiveState:
        """What a view would have been told at the end."""
        return self._engine.state(ended=True)

    def _last_line(self, why: str) -> None:
        engine = self._engine
        self._ended = True
        totals = {
            "why": why,
            "samples": engine.samples,
            "samples_lost": engine.samples_lost,
            "alarms_raised": engine.alarms.activations,
        }
        self._journal.write("stop", engine.position, engine.seconds, totals)
