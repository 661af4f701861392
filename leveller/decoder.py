"""One file, or a take split into several, decoded once for all the tracks that lie in it.

A polyphonic file holds several tracks, and several threads walk them at nearly the same step. Each chunk of the file
is decoded when the first reader asks for it and kept until the last one went past it; buffers are used again. Chunks
have a fixed size, whatever the readers' blocks are, so that all that follows sees the same pieces. A `Chain` reads the
files of a split take as one; it holds one of them open at a time.
"""

from __future__ import annotations

import itertools
import threading
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.errors import InputError
from leveller.samples import AudioSource, Part, Samples, repair

CHUNK_FRAMES = 65536  # own measurement, PCM_24: costs 10 % over a bare read loop; 4096 costs 75 %, more gains nothing


class Chain:
    """Files that follow each other without a gap, read as if they were one; a context manager.

    It has what is used of an open file: `frames`, `samplerate`, `channels`, `seek`, `read`, `close`. The next file is
    opened when it is reached.

    Parameters
    ----------
    parts : sequence of Part
    opener : callable
        opens one file for reading
    """

    def __init__(self, parts: Sequence[Part], opener: Callable[[Path], Any]) -> None:
        self._parts, self._opener = parts, opener
        self._ends = list(itertools.accumulate(part.frames for part in parts))
        self.frames = self._ends[-1]
        self._at = 0  # frame of the whole
        self._index, self._file = 0, opener(parts[0].path)
        self.samplerate, self.channels = int(self._file.samplerate), int(self._file.channels)
        self._check()

    def __enter__(self) -> Chain:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the file that is open; closing twice does no harm."""
        self._file.close()

    def seek(self, frame: int) -> None:
        """Go to a frame of the whole."""
        index = next((i for i, end in enumerate(self._ends) if frame < end), len(self._parts) - 1)
        self._enter(index)
        self._file.seek(frame - self._ends[index] + self._parts[index].frames)
        self._at = frame

    def read(self, *, out: Samples) -> Samples:
        """The next frames, shape=(frames, channels), in the array given; fewer at the end of the last file."""
        done = 0
        while done < len(out) and self._at < self.frames:
            if self._at == self._ends[self._index]:
                self._enter(self._index + 1)
            done += self._read(out[done : done + self._ends[self._index] - self._at])
        return out[:done]

    def _read(self, out: Samples) -> int:
        """Fill the array from the file that is open."""
        path = self._parts[self._index].path
        try:
            got = len(self._file.read(out=out))
        except (RuntimeError, OSError) as error:
            raise InputError(f"{path}: cannot be read ({error})") from error
        if got < len(out):
            raise InputError(f"{path}: ended before frame {self._parts[self._index].frames}, which it had when it was "
                             "checked. It must not change while it is read")
        self._at += got
        return got

    def _enter(self, index: int) -> None:
        """Open another file of the take, at its start."""
        if index != self._index:
            self._file.close()
            self._file = self._opener(self._parts[index].path)
            self._index = index
            self._check()

    def _check(self) -> None:
        """The file is still what it was when the session was opened."""
        part, file = self._parts[self._index], self._file
        if (file.samplerate, file.channels) != (self.samplerate, self.channels) or file.frames < part.frames:
            file.close()
            raise InputError(f"{part.path}: {file.frames} frames of {file.channels} channels, but {part.frames} of "
                             f"{self.channels} when it was checked. It must not change while it is read")


class Decoder:
    """One open file, decoded once in chunks of fixed size that stay until every user went past them."""

    def __init__(self, file: Any, source: AudioSource, users: int) -> None:
        self.path, self._frames, self._is_float = source.path, source.source_frames, source.is_float
        self._file = file
        if self._file.frames < self._frames or self._file.samplerate != source.source_rate_hz:
            self._file.close()
            raise InputError(f"{self.path}: {self._file.frames} frames, but {self._frames} when it was checked. "
                             "It must not change while it is read")
        self.chunk_count = -(-self._frames // CHUNK_FRAMES)
        self.blocks_read = 0
        self._at = dict.fromkeys(range(users), 0)
        self._chunks: dict[int, tuple[Samples, npt.NDArray[np.bool_] | None]] = {}
        self._free: list[Samples] = []
        self._lock = threading.Lock()

    def chunk(self, user: int, index: int) -> tuple[Samples, npt.NDArray[np.bool_] | None]:
        """Chunk `index` as (frames, channels), with the samples repaired in it; frees the user's earlier ones."""
        with self._lock:
            self._at[user] = index
            self._drop()
            while self.blocks_read <= index:
                self._chunks[self.blocks_read] = self._decode()
                self.blocks_read += 1
            return self._chunks[index]

    def leave(self, user: int) -> None:
        """The user takes no more; the last one closes the file."""
        with self._lock:
            if self._at.pop(user, None) is not None:
                self._drop()
            if not self._at:
                self._file.close()

    def _drop(self) -> None:
        """Take back the chunks that all users have left."""
        lowest = min(self._at.values(), default=self.chunk_count)
        for index in [i for i in self._chunks if i < lowest]:
            self._free.append(self._chunks.pop(index)[0])

    def _decode(self) -> tuple[Samples, npt.NDArray[np.bool_] | None]:
        """Read the next chunk into a buffer that is free."""
        buffer = self._free.pop() if self._free else np.empty((CHUNK_FRAMES, self._file.channels), np.float32)
        if len(buffer) != CHUNK_FRAMES:
            buffer = np.empty((CHUNK_FRAMES, self._file.channels), np.float32)
        start = self.blocks_read * CHUNK_FRAMES
        chunk = buffer[: min(CHUNK_FRAMES, self._frames - start)]
        try:
            got = len(self._file.read(out=chunk))
        except (RuntimeError, OSError) as error:
            raise InputError(f"{self.path}: cannot be read behind frame {start} ({error})") from error
        if got < len(chunk):
            raise InputError(f"{self.path}: ended at frame {start + got}, but had {self._frames} when it was checked. "
                             "It must not change while it is read")
        return chunk, repair(chunk) if self._is_float else None
