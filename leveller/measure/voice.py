"""Voice activity, the sole user of webrtcvad.

The detector is the Gaussian-mixture one of the WebRTC project (module `webrtcvad`), mode 2, on 20 ms frames at 16 kHz.
It decides by absolute level among other things, so each track is first scaled to one level (its own loud speech in a
preview at -20 dBFS); otherwise a quiet recording would have no voices. It is evidence, never a veto: laughter,
whispers and creaky endings often fail it.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from leveller.units import Bools, db_to_gain

FRAME = 320  # 20 ms
HOPS_PER_FRAME = 2
MODE = 2
LOUD_DBFS = -20.0  # where the loud speech of a track is put for the detector


class VoiceMeter:
    """Streaming; `push` 16 kHz samples, then `result`: one flag a hop."""

    def __init__(self, loud_dbfs: float) -> None:
        import webrtcvad

        self._vad = webrtcvad.Vad(MODE)
        gain = db_to_gain(LOUD_DBFS - loud_dbfs) if math.isfinite(loud_dbfs) else 0.0
        self._scale = np.float32(gain * 32768)
        self._rest = np.empty(0, np.int16)
        self._flags: list[bool] = []

    def push(self, block: npt.NDArray[np.float32]) -> None:
        """Take 16 kHz samples, shape=(frames,)."""
        scaled = np.clip(np.rint(block * self._scale), -32768, 32767).astype(np.int16)
        samples = np.concatenate([self._rest, scaled])
        whole = len(samples) // FRAME * FRAME
        data = samples[:whole].tobytes()
        step = 2 * FRAME
        self._flags.extend(
            self._vad.is_speech(data[at : at + step], 16000) for at in range(0, len(data), step))
        self._rest = samples[whole:]

    def result(self) -> Bools:
        """Flags of all hops of the whole frames so far."""
        return np.repeat(np.array(self._flags, np.bool_), HOPS_PER_FRAME)
