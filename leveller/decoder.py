"""One file, decoded once for all the tracks that lie in it.

A polyphonic file holds several tracks, and several threads walk them at nearly the same step. Each chunk of the file
is decoded when the first reader asks for it and kept until the last one went past it; buffers are used again. Chunks
have a fixed size, whatever the readers' blocks are, so that all that follows sees the same pieces.
"""

from __future__ import annotations

import threading
from typing import Any

import numpy as np
import numpy.typing as npt

from leveller.errors import InputError
from leveller.samples import AudioSource, Samples, repair

CHUNK_FRAMES = 65536  # own measurement, PCM_24: costs 10 % over a bare read loop; 4096 costs 75 %, more gains nothing


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
