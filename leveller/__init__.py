"""leveller: a multitrack dialogue leveller for spoken-word editors.

Conventions, said once:

* audio is float32, `(frames,)` for one channel or `(frames, channels)`; analysis grids are `(hops, tracks)`;
* a *frame* is one instant on all channels, a *block* is what is read at once, a *hop* is one analysis step of 10 ms;
* units ride in names: `_db`, `_lufs`, `_dbtp`, `_hz`, `_s`, `_frames`, `_hops`;
* silence is -inf dB, a gain of -inf dB is zero, and a silent track gets 0 dB of gain and no speech.
"""

__version__ = "0.1.0"
