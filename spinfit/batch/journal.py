"""`journal.jsonl`: one line of JSON for each fit that came to an end, appended and never changed.

What a line says was on the disk before the line was.  A line that a power cut or a full disk left unfinished is
cut off when the file is opened next.  Only where the last line of each trace begins is held in memory.
"""

from __future__ import annotations

import json
import os
from collections.abc import Iterable, Iterator, Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any, BinaryIO

from spinfit.errors import InputError
from spinfit.files.folders import sync_folder

JOURNAL = "journal.jsonl"

Record = dict[str, Any]


def _record(line: bytes) -> Record | None:
    """Return what a line says; None for one that is damaged."""
    try:
        record = json.loads(line)
    except ValueError:
        return None
    return record if isinstance(record, dict) and isinstance(record.get("trace"), str) else None


class Journal:
    """The journal of one folder, open for appending; a context manager.

    Raises
    ------
    InputError
        When the file cannot be opened.
    """

    def __init__(self, folder: Path) -> None:
        self.path = folder / JOURNAL
        self._places: dict[str, int] = {}
        self._end = 0
        is_new = not self.path.exists()
        try:
            self._stream: BinaryIO = open(self.path, "a+b", buffering=0)
        except OSError as error:
            raise InputError(f"cannot be written ({error.strerror or error})", file=self.path) from error
        try:
            if is_new:
                sync_folder(folder)
            self.catch_up()
        except BaseException:
            self._stream.close()
            raise

    def catch_up(self) -> None:
        """Take in what is in the file and not yet known, and cut off what was never finished.

        That is everything when the file is opened, and what Ctrl-C kept `append` from noting.
        """
        with open(self.path, "rb") as stream:
            stream.seek(self._end)
            for line in stream:
                if not line.endswith(b"\n"):
                    break
                record = _record(line)
                if record is not None:
                    self._places[record["trace"]] = self._end
                self._end += len(line)
        with suppress(OSError):  # not a plain file
            self._stream.truncate(self._end)

    def __enter__(self) -> Journal:
        return self

    def __exit__(self, *reason: object) -> None:
        self._stream.close()

    def append(self, records: Iterable[Mapping[str, Any]]) -> None:
        """Add lines and wait until they are on the disk; all or none.

        Raises
        ------
        OSError
            When there is no room; the file is then as it was.
        """
        lines = [(str(one["trace"]), _line(one)) for one in records]
        if lines and self._stream.seek(0, os.SEEK_END) != self._end:
            self.catch_up()  # Ctrl-C came between writing and noting; what was written comes again
            lines = [(name, line) for name, line in lines if self._line_of(name) != line]
        if not lines:
            return
        content = b"".join(line for _, line in lines)
        try:
            rest = memoryview(content)
            while rest:
                rest = rest[self._stream.write(rest) :]
            os.fsync(self._stream.fileno())
        except OSError:
            with suppress(OSError):
                self._stream.truncate(self._end)
            raise
        for name, line in lines:
            self._places[name] = self._end
            self._end += len(line)

    def _line_of(self, trace: str) -> bytes:
        """Return the last line of a trace as it stands in the file; nothing when it has none."""
        if trace not in self._places:
            return b""
        with open(self.path, "rb") as stream:
            stream.seek(self._places[trace])
            return stream.readline()

    def __contains__(self, trace: str) -> bool:
        return trace in self._places

    def __iter__(self) -> Iterator[str]:
        """Names of traces by their first line."""
        return iter(self._places)

    def last(self, trace: str) -> Record:
        """Return what the last line of a trace says."""
        with open(self.path, "rb") as stream:
            stream.seek(self._places[trace])
            record = _record(stream.readline())
        if record is None:
            raise InputError("was changed while it was in use", "run the batch again", file=self.path)
        return record

    def records(self, traces: Iterable[str]) -> Iterator[Record]:
        """Yield the last line of each of these traces that has one, one at a time in memory."""
        with open(self.path, "rb") as stream:
            for name in traces:
                if name in self._places:
                    stream.seek(self._places[name])
                    record = _record(stream.readline())
                    if record is not None:
                        yield record


def _line(record: Mapping[str, Any]) -> bytes:
    return json.dumps(record, ensure_ascii=False, allow_nan=False, separators=(",", ":")).encode("utf-8") + b"\n"


def journal_records(folder: Path) -> Iterator[Record]:
    """Yield every line of a folder's journal, for those who only read; damaged lines are passed over.

    Raises
    ------
    InputError
        When there is no journal.
    """
    path = folder / JOURNAL
    try:
        with open(path, "rb") as stream:
            for line in stream:
                record = _record(line)
                if record is not None:
                    yield record
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror or error})", "name a batch's folder", file=path) from error
