"""Which links the arguments name: sources, channels and link files, multiplied out into the arguments of one link each."""

import argparse
import os
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from monitor.errors import InputError

# what may be given once for all sources, or once for each
_PER_SOURCE = ("rate", "format", "topic")
_ONLY_ONCE = "-"


@dataclass(frozen=True, slots=True)
class LinkArguments:
    """One link of a command.

    Attributes
    ----------
    parsed
        The command's arguments as they would be for this link alone: one source, its channels, one link file.
    stream
        Links of one number are in the same samples.
    label
        Tells the stream from the others: the source's name, the channel; may be empty.
    """

    parsed: argparse.Namespace
    stream: int
    label: str


def links_of(parsed: argparse.Namespace) -> tuple[LinkArguments, ...]:
    """The links that a command's arguments name, in their order.

    Each source is a link; several channels without ``--iq`` are as many, with ``--iq`` each two. Link files are one for all, or as many as
    there are links in order; several with a single stream are as many links in the same samples. Raises InputError where the numbers do
    not fit.
    """
    sources: list[str] = parsed.source
    if sources.count(_ONLY_ONCE) > 1:
        raise InputError("standard input can be given as a source only once")
    given = {name: _for_each(parsed, name, len(sources)) for name in _PER_SOURCE if hasattr(parsed, name)}
    groups = _channel_groups(parsed.channels, iq=parsed.iq)
    streams: list[LinkArguments] = []
    names = _short_names(sources)
    for number, source in enumerate(sources):
        for group in groups:
            changed: dict[str, Any] = {name: values[number] for name, values in given.items()}
            channel = _channel_words(group) if len(groups) > 1 else ""
            label = ", ".join(part for part in (names[number] if len(sources) > 1 else "", channel) if part)
            streams.append(
                LinkArguments(_changed(parsed, source=source, channels=group, **changed), len(streams), label)
            )
    files = parsed.link or [None]
    if len(streams) == 1:
        return tuple(LinkArguments(_changed(streams[0].parsed, link=file), 0, streams[0].label) for file in files)
    if len(files) not in (1, len(streams)):
        raise InputError(
            f"--link was given {len(files)} times for {len(streams)} links; give one for all, or one for each in order"
        )
    return tuple(
        LinkArguments(_changed(stream.parsed, link=files[number % len(files)]), stream.stream, stream.label)
        for number, stream in enumerate(streams)
    )


def file_name(name: str) -> str:
    """A link's name as a file's or folder's name."""
    return "".join(c if c.isalnum() or c in "-_." else "-" for c in name).strip(".") or "link"


def named_file(path: Path, name: str) -> Path:
    """The file's name with the link's name in it: one file each where one was asked for."""
    return path.with_name(f"{path.stem}-{file_name(name)}{path.suffix}")


def name_links(names: Sequence[str], labels: Sequence[str]) -> tuple[str, ...]:
    """A name for each link that no other has: as in its link file, with its label where that is not enough, else a number."""
    found = [name or label for name, label in zip(names, labels, strict=True)]
    if len(set(found)) < len(found):
        found = [", ".join(dict.fromkeys(part for part in pair if part)) for pair in zip(names, labels, strict=True)]
    taken: set[str] = set()
    result = []
    for number, name in enumerate(found, start=1):
        unique = name or f"link {number}"
        while unique in taken:
            unique = f"{name or 'link'} ({number})"
            number += 1
        taken.add(unique)
        result.append(unique)
    return tuple(result)


def _for_each(parsed: argparse.Namespace, name: str, sources: int) -> list[Any]:
    values = getattr(parsed, name) or [None]
    if len(values) not in (1, sources):
        many = "1 source" if sources == 1 else f"{sources} sources"
        raise InputError(f"--{name} was given {len(values)} times for {many}; give it once, or once for each in order")
    return list(values) if len(values) == sources else list(values) * sources


def _channel_groups(channels: tuple[int, ...] | None, *, iq: bool) -> list[tuple[int, ...] | None]:
    if channels is None:
        return [None]
    if len(set(channels)) < len(channels):
        raise InputError(f"--channels {','.join(map(str, channels))}: each channel can be given once")
    if not iq:
        return [(channel,) for channel in channels]
    if len(channels) > 2 and len(channels) % 2:
        raise InputError(f"--channels {','.join(map(str, channels))}: --iq takes two channels for each link")
    return [channels[at : at + 2] for at in range(0, len(channels), 2)]


def _channel_words(group: tuple[int, ...] | None) -> str:
    if group is None:
        return ""
    return f"channel {group[0]}" if len(group) == 1 else f"channels {group[0]} and {group[1]}"


def _short_names(sources: Sequence[str]) -> list[str]:
    """Sources without what they share: a file's name without folder and suffix where that is enough."""
    short = [
        source if "://" in source else os.path.splitext(os.path.basename(source))[0] or source for source in sources
    ]
    return short if len(set(short)) == len(short) else list(sources)


def _changed(parsed: argparse.Namespace, **changes: object) -> argparse.Namespace:
    return argparse.Namespace(**{**vars(parsed), **changes})
