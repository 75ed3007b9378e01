"""SigMF recordings: a metadata file beside a data file, or both in an archive (SigMF specification 1.2.6).

The metadata are read as plain JSON with the few checks that the samples depend on. The `sigmf` package would refuse a
recording for its first flaw anywhere, reads a dataset's checksum through on opening, and takes longer to import than
most of the rest of a start; the tests use it as the other side instead. core:sha512 is not verified, since that would
read the file twice.
"""

import json
import math
import os
import tarfile
from contextlib import suppress
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any, Final

from monitor.errors import InputError, printable
from monitor.sources.base import SampleOptions, SourceInfo, choose_channels, settle_rate, settle_span
from monitor.sources.formats import SampleFormat, parse_datatype
from monitor.sources.raw import RawFile, RawLayout, Stretch, clip_stretches, open_raw_file, partial_note

_META: Final = ".sigmf-meta"
_DATA: Final = ".sigmf-data"
_ARCHIVE: Final = ".sigmf"
_COLLECTION: Final = ".sigmf-collection"
_META_LIMIT: Final = 64 << 20  # bytes; metadata are held in memory

Metadata = dict[str, Any]


@dataclass(frozen=True, slots=True)
class Recording:
    """Where a recording's metadata and samples lie.

    Attributes
    ----------
    meta
        The JSON text, ``None`` if the data file stands alone.
    meta_name
        The name for error texts.
    data_path, offset, size
        The file that holds the samples, and which of its bytes; ``size`` ``None``: to its end.
    missing
        Bytes that an archive announces beyond its end.
    """

    meta: bytes | None
    meta_name: str
    data_path: str | None = None
    offset: int = 0
    size: int | None = None
    missing: int = 0


@dataclass(frozen=True, slots=True)
class _Capture:
    sample_start: int
    global_index: int | None
    header_bytes: int
    frequency_hz: float | None


def find_recording(uri: str) -> Recording | None:
    """Find the recording that a name stands for: either file, the stem of both, or an archive.

    Returns ``None`` where there is no SigMF file of that name. Raises InputError for what is there and cannot be
    read, OSError for a failing disk.
    """
    lower = uri.lower()
    if lower.endswith(_COLLECTION):
        raise InputError(f"{uri}: a collection names recordings and holds none; open one of them")
    if lower.endswith(_META):
        return _pair(uri, None) if os.path.exists(uri) else None
    if lower.endswith(_DATA):
        stem = uri[: -len(_DATA)]
        if not os.path.exists(uri):
            if os.path.exists(stem + _META):
                return _pair(stem + _META, None)
            return None
        return _pair(stem + _META, uri) if os.path.exists(stem + _META) else Recording(None, stem + _META, uri)
    if lower.endswith(_ARCHIVE):
        return _archive(uri) if os.path.exists(uri) else None
    if os.path.exists(uri + _META):
        return _pair(uri + _META, None)
    if os.path.exists(uri + _ARCHIVE):
        return _archive(uri + _ARCHIVE)
    if os.path.exists(uri + _DATA):
        return Recording(None, uri + _META, uri + _DATA)
    return None


def _pair(meta_path: str, data_path: str | None) -> Recording:
    with open(meta_path, "rb") as file:
        text = file.read(_META_LIMIT + 1)
    return Recording(text, meta_path, data_path)


def _archive(path: str) -> Recording:
    """Find the first recording in a tar archive without unpacking it."""
    file_bytes = os.path.getsize(path)
    members: dict[str, tarfile.TarInfo] = {}
    try:
        with tarfile.open(path, "r:") as archive:
            meta_member = None
            try:
                while (member := archive.next()) is not None:
                    if member.isreg():
                        members[member.name] = member
                        if meta_member is None and member.name.endswith(_META):
                            meta_member = member
            except tarfile.ReadError:
                pass  # cut off: what came before may be enough
            if meta_member is None:
                raise InputError(f"{path}: holds no {_META} file; is the archive whole?")
            handle = archive.extractfile(meta_member)
            text = handle.read(_META_LIMIT + 1) if handle else b""
    except (tarfile.TarError, EOFError) as error:
        raise InputError(f"{path}: not a plain tar archive ({error}); unpack it if it is compressed") from error
    dataset = _dataset_name(text)
    stem = meta_member.name[: -len(_META)]
    folder = meta_member.name.rpartition("/")[0]
    candidates = [f"{folder}/{dataset}" if folder else dataset] if dataset else []
    data = next((members[name] for name in (*candidates, stem + _DATA) if name in members), None)
    name = f"{path}:{meta_member.name}"
    if data is None:
        raise InputError(f"{name}: its data file is not in the archive")
    if data.issparse():
        raise InputError(f"{path}: the samples are stored sparse; unpack the archive")
    present = min(data.size, max(0, file_bytes - data.offset_data))
    return Recording(text, name, path, data.offset_data, present, data.size - present)


def _dataset_name(text: bytes) -> str | None:
    try:
        name = json.loads(text.decode("utf-8-sig"))["global"]["core:dataset"]
    except (ValueError, KeyError, TypeError, RecursionError):
        return None
    return name if isinstance(name, str) else None


def open_recording(uri: str, recording: Recording, options: SampleOptions, block_samples: int) -> RawFile:
    """Open a recording that was found; raise InputError."""
    if recording.meta is None:
        assert recording.data_path is not None
        if options.format is None or options.rate_hz is None:
            raise InputError(
                f"{recording.meta_name}: is missing; without it give --format and --rate for {recording.data_path}"
            )
        return open_raw_file(recording.data_path, options, block_samples)
    notes: list[str] = []
    where = recording.meta_name
    meta = _parse(recording.meta, where)
    about = meta["global"]
    if recording.data_path is None:
        recording = replace(recording, data_path=_data_path(about, where))
    path = recording.data_path
    assert path is not None
    stored = _format(about, options, where, notes)
    n_channels = _integer(about, "core:num_channels", 1, notes) or 1
    rate_hz = settle_rate(_number(about, "core:sample_rate", notes), options, where, notes)
    choice = choose_channels(options, n_channels, stored.complex_samples, uri)
    layout = RawLayout(stored, n_channels, choice)
    captures = _captures(meta, notes)
    size = recording.size if recording.size is not None else os.path.getsize(path)
    if recording.missing:
        notes.append(
            f"cut short: the archive announces {size + recording.missing} bytes of samples, there are {size}; "
            "what is there is measured"
        )
    size -= min(size, _integer(about, "core:trailing_bytes", 0, notes))
    stretches = lay_out(captures, recording.offset, size, layout.frame_bytes, notes)
    if not stretches:
        raise InputError(f"{path}: holds no whole sample" if size else f"{path}: the recording has no samples")
    frequencies = list(dict.fromkeys(c.frequency_hz for c in captures if c.frequency_hz is not None))
    if len(frequencies) > 1:
        notes.append(f"core:frequency changes between captures; the first, {frequencies[0]:.12g} Hz, is used")
    length = stretches[-1].start + stretches[-1].count
    first, stop = settle_span(length, rate_hz, options, uri)
    wanted = clip_stretches(stretches, layout.frame_bytes, first, stop)
    if not wanted:
        raise InputError(f"{uri}: --start and --duration fall into a gap of the recording")
    info = SourceInfo(
        uri=uri,
        format=layout.delivered.name,
        sample_rate_hz=rate_hz,
        complex_samples=layout.delivered.complex_samples,
        samples=sum(stretch.count for stretch in wanted),
        centre_hz=frequencies[0] if frequencies else None,
        notes=tuple(map(printable, notes)),
        start=wanted[0].start,
    )
    return RawFile(path, info, layout, wanted, block_samples)


def lay_out(captures: list[_Capture], offset: int, size: int, frame_bytes: int, notes: list[str]) -> list[Stretch]:
    """Return where the samples of all captures lie, neighbours joined where nothing lies or is lost between them.

    Each capture's header_bytes come before its samples. Where two captures give a core:global_index, samples that
    these say are missing in between move the later one's index in the stream. ``offset`` and ``size``: the dataset's
    bytes in its file.
    """
    stretches: list[Stretch] = []
    end_byte = offset + size
    byte, lost = offset, 0
    partial = 0
    if captures[0].sample_start > 0:
        captures = [_Capture(0, None, 0, None), *captures]
    for number, capture in enumerate(captures):
        if number and (gap := _gap(captures[number - 1], capture, number, notes)):
            lost += gap
        byte += capture.header_bytes
        available, partial = divmod(max(0, end_byte - byte), frame_bytes)
        last = number == len(captures) - 1
        count = available if last else min(available, captures[number + 1].sample_start - capture.sample_start)
        start = capture.sample_start + lost
        if count:
            previous = stretches[-1] if stretches else None
            if (
                previous
                and previous.offset + previous.count * frame_bytes == byte
                and previous.start + previous.count == start
            ):
                stretches[-1] = replace(previous, count=previous.count + count)
            else:
                stretches.append(Stretch(byte, start, count))
        byte += count * frame_bytes
        if not last and count < captures[number + 1].sample_start - capture.sample_start:
            notes.append(
                f"cut short: the captures lead to sample {captures[-1].sample_start}, the data end after "
                f"{capture.sample_start + count}"
            )
            break
    if partial and byte + partial == end_byte:
        notes.append(partial_note(partial))
    return stretches


def _gap(before: _Capture, after: _Capture, number: int, notes: list[str]) -> int:
    if before.global_index is None or after.global_index is None:
        return 0
    gap = (after.global_index - before.global_index) - (after.sample_start - before.sample_start)
    if gap > 0:
        notes.append(f"{gap} samples are missing before sample {after.sample_start} (core:global_index)")
    elif gap < 0:
        notes.append(f"core:global_index of capture {number} goes back; ignored")
    return max(gap, 0)


def _parse(text: bytes, where: str) -> Metadata:
    if len(text) > _META_LIMIT:
        raise InputError(f"{where}: above {_META_LIMIT >> 20} MiB of metadata; split the recording")
    try:
        meta = json.loads(text.decode("utf-8-sig"))
    except json.JSONDecodeError as error:
        raise InputError(f"{where}: not JSON: {error.msg} at line {error.lineno}, column {error.colno}") from error
    except UnicodeDecodeError as error:
        raise InputError(f"{where}: not UTF-8 text (byte {error.start})") from error
    except (ValueError, RecursionError) as error:
        raise InputError(f"{where}: not usable JSON: {error}") from error
    if not isinstance(meta, dict) or not isinstance(meta.get("global"), dict):
        raise InputError(f"{where}: no SigMF metadata: there is no object 'global'")
    return meta


def _data_path(about: Metadata, where: str) -> str:
    conforming = where[: -len(_META)] + _DATA
    dataset = about.get("core:dataset")
    if isinstance(dataset, str) and dataset:
        if "/" in dataset or "\\" in dataset or "\0" in dataset or dataset in (".", ".."):
            raise InputError(f"{where}: core:dataset '{dataset}' must be a file name in the same directory")
        path = os.path.join(os.path.dirname(where), dataset)
        if os.path.isfile(path):
            return path
        if not os.path.isfile(conforming):
            raise InputError(f"{where}: its data file {path} is missing; put it beside the metadata")
    if not os.path.isfile(conforming):
        if about.get("core:metadata_only") is True:
            raise InputError(f"{where}: metadata only, as it says; there are no samples")
        raise InputError(f"{where}: its data file {conforming} is missing; put it beside the metadata")
    return conforming


def _format(about: Metadata, options: SampleOptions, where: str, notes: list[str]) -> SampleFormat:
    declared = about.get("core:datatype")
    if options.format is not None:
        stored = parse_datatype(options.format)
        if declared != stored.name:
            notes.append(
                f"core:datatype is {declared if declared is not None else 'missing'}; --format {stored.name} is used"
            )
        return stored
    if declared is None:
        raise InputError(f"{where}: core:datatype is missing; give --format NAME (cf32_le, ri16_le, cu8)")
    try:
        stored = parse_datatype(str(declared))
    except InputError as error:
        raise InputError(f"{where}: core:datatype: {error}") from error
    if declared != stored.name:
        notes.append(f"core:datatype '{declared}' is taken as {stored.name}")
    return stored


def _captures(meta: Metadata, notes: list[str]) -> list[_Capture]:
    listed = meta.get("captures")
    if not isinstance(listed, list):
        notes.append("the metadata have no list of captures; one from sample 0 is assumed")
        listed = []
    captures = []
    for number, item in enumerate(listed):
        if not isinstance(item, dict):
            notes.append(f"capture {number} is not an object and was left out")
            continue
        if "core:sample_start" not in item:
            notes.append(f"capture {number} has no core:sample_start; " + ("left out" if number else "0 is assumed"))
            if number:
                continue
        index = _integer(item, "core:global_index", -1, notes)
        captures.append(
            _Capture(
                _integer(item, "core:sample_start", 0, notes),
                index if index >= 0 else None,
                _integer(item, "core:header_bytes", 0, notes),
                _number(item, "core:frequency", notes),
            )
        )
    if any(later.sample_start < earlier.sample_start for earlier, later in pairwise(captures)):
        notes.append("the captures are not in order of core:sample_start; they were sorted")
        captures.sort(key=lambda capture: capture.sample_start)
    return captures or [_Capture(0, None, 0, None)]


def _number(table: Metadata, key: str, notes: list[str]) -> float | None:
    """Return a finite number, also one written as text; note and ignore anything else."""
    value = table.get(key)
    if value is None:
        return None
    number = math.nan
    if isinstance(value, (int, float, str)) and not isinstance(value, bool):
        with suppress(ValueError, OverflowError):
            number = float(value)
    if not math.isfinite(number):
        notes.append(f"{key} is not a number and was ignored")
        return None
    if isinstance(value, str):
        notes.append(f"{key} is text; taken as {number:.12g}")
    return number


def _integer(table: Metadata, key: str, default: int, notes: list[str]) -> int:
    """Return a whole number from 0 up; note and ignore anything else."""
    value = table.get(key)
    if value is None:
        return default
    if isinstance(value, int) and not isinstance(value, bool):
        if value >= 0:
            return value
    else:
        number = _number(table, key, notes)
        if number is None:
            return default
        if number >= 0 and number.is_integer():
            return int(number)
    notes.append(f"{key} {value} is not a whole number from 0 up and was ignored")
    return default
