"""A recording judged as a watch would have judged it: the same engine, the same lines, the sample index for a clock."""

import argparse
from types import TracebackType
from typing import Any, Self

from monitor.alarm_rules import AlarmRule
from monitor.engine import Engine, EngineOptions
from monitor.linkfile import LinkOptions
from monitor.running import chain_options, open_journal, start_fields
from monitor.sources import Source


class Judged:
    """Feeds an engine beside the replay's own chain, and keeps its journal; a context."""

    def __init__(
        self, parsed: argparse.Namespace, source: Source, link: LinkOptions, rules: tuple[AlarmRule, ...]
    ) -> None:
        self._journal = open_journal(parsed)
        self._start = start_fields(parsed.source, link, rules)
        self._engine = Engine(
            link.wanted(),
            sample_rate_hz=source.info.sample_rate_hz,
            complex_in=source.info.complex_samples,
            options=EngineOptions(
                window=None, every_s=parsed.every, rules=rules, display=False, chain=chain_options(parsed, link)
            ),
            line=self._journal.write,
        )
        self.feed = self._engine.feed

    def __enter__(self) -> Self:
        self._journal.write("start", 0, 0.0, self._start)
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._journal.close()

    def finish(self) -> list[dict[str, Any]]:
        """The stream has ended; returns the alarms that there were."""
        engine = self._engine
        engine.finish()
        totals = {
            "why": "the recording ended",
            "samples": engine.position - engine.samples_lost,
            "samples_lost": engine.samples_lost,
            "alarms_raised": engine.alarms.activations,
        }
        self._journal.write("stop", engine.position, engine.seconds, totals)
        return engine.alarms.record()
