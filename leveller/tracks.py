"""One track, walked in session time, whatever the file it lies in.

A `TrackReader` gives silence before its track's offset, the source at the session's rate, and silence behind its end,
so that every reader of a session gives blocks of the same frames. The decoder hands it chunks of a fixed size and the
resampler sees only those, so the bytes do not depend on how much is read at once. Channels are picked or averaged
before the resampler; polarity and high-pass come after it.

Conventions: float32, `(frames,)`, or `(frames, 2)` for a stereo bed. Nothing here opens a file (`audio` does).
"""

from __future__ import annotations

from typing import Protocol

import numpy as np

from leveller.decoder import CHUNK_FRAMES, Decoder
from leveller.samples import AudioSource, HighPass, Samples


class Resampler(Protocol):
    """What a reader needs of a streaming resampler; `audio.Resampler` is one."""

    def push(self, block: Samples, last: bool = False) -> Samples:
        """The next samples at the new rate; `last` brings out what is still held back."""
        ...


class TrackReader:
    """One track in session time; a context manager. Use each reader from one thread at a time.

    Parameters
    ----------
    track : AudioSource
    rate_hz : int
        of the session
    decoder : Decoder
        of the track's file; closed by the last reader that leaves it
    user : int
        this reader's number among those of the decoder, from 0
    resampler : Resampler
        from the rate of the track's clock to that of the session

    Attributes
    ----------
    repaired_frames : int
        frames read so far in which a NaN or Inf was silenced
    blocks_read : int
        chunks that its file has decoded so far, for all readers of that file together
    """

    def __init__(
        self, track: AudioSource, rate_hz: int, *, decoder: Decoder, user: int, resampler: Resampler
    ) -> None:
        self.track = track
        self.repaired_frames = 0
        self._decoder, self._user, self._resampler = decoder, user, resampler
        self._pick_buffer = np.empty((CHUNK_FRAMES,), np.float32)
        self._position = 0  # in session frames
        self._chunk = 0
        self._piece: Samples = np.empty((0,) if track.width == 1 else (0, 2), np.float32)
        self._filter = None if track.high_pass_hz is None else HighPass(track.high_pass_hz, rate_hz, track.width)

    def __enter__(self) -> TrackReader:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    @property
    def blocks_read(self) -> int:
        """Chunks decoded so far by this reader's file."""
        return self._decoder.blocks_read

    def close(self) -> None:
        """Leave the file; closing twice does no harm."""
        self._decoder.leave(self._user)

    def read(self, frames: int, *, out: Samples | None = None) -> Samples:
        """The next `frames` of session time, `(frames,)` or `(frames, 2)`; zeros outside the track.

        `out` is filled and returned where it is given, else a new array.
        """
        shape = (frames,) if self.track.width == 1 else (frames, 2)
        block = np.empty(shape, np.float32) if out is None else out
        start = self.track.offset_frames - self._position
        first = min(max(start, 0), frames)
        last = min(max(start + self.track.frames, 0), frames)
        block[:first] = 0
        self._fill(block[first:last])
        block[last:] = 0
        self._position += frames
        return block

    def _fill(self, block: Samples) -> None:
        """The next samples of the track itself."""
        done = 0
        while done < len(block):
            if not len(self._piece):
                if self._chunk == self._decoder.chunk_count:
                    block[done:] = 0  # the resampler may end a frame early
                    break
                self._piece = self._next_piece()
            part = self._piece[: len(block) - done]
            block[done : done + len(part)] = part
            self._piece = self._piece[len(part) :]
            done += len(part)
        if self.track.polarity < 0:
            np.negative(block, out=block)
        if self._filter is not None and len(block):
            self._filter.apply(block)

    def _next_piece(self) -> Samples:
        """One chunk of the source at the session's rate."""
        chunk, repaired = self._decoder.chunk(self._user, self._chunk)
        self._chunk += 1
        channels = self.track.channels
        if repaired is not None:
            self.repaired_frames += int(np.count_nonzero(repaired[:, list(channels)].any(axis=1)))
        if len(channels) == 1:
            picked = chunk[:, channels[0]]
        elif self.track.width == 2:
            picked = chunk[:, list(channels)]
        else:
            picked = np.add(chunk[:, channels[0]], chunk[:, channels[1]], out=self._pick_buffer[: len(chunk)])
            picked *= np.float32(0.5)
        return self._resampler.push(picked, last=self._chunk == self._decoder.chunk_count)
