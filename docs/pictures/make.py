"""Makes the pictures of the README from the demo session: levels before and after, and the report page.

    python docs/pictures/make.py

before_after.svg is drawn from what a run measured: for each microphone the K-weighted level (ITU-R BS.1770-5) of
every 0.1 s, in the source and, with the gain of the automation and the make-up, in its stem. In the page's colours:
green where the microphone's own voice was decided, grey elsewhere. report.png is report.html in Debian's chromium,
taken through chromedriver.
"""

from __future__ import annotations

import html
import sys
import tempfile
from pathlib import Path

import numpy as np

from leveller.pipeline import Result, process
from leveller.plan.levels import k_power

HERE = Path(__file__).parent
ROOT = HERE.parents[1]
STEP_HOPS = 10
BOTTOM_LUFS, TOP_LUFS = -70.0, -10.0
LINES_LUFS = (-60, -40, -20)
WIDTH, ROW, GAP, LEFT, TOP, LABEL = 470, 92, 14, 60, 44, 26
INK, FAINT, SHEET, OWN, OTHER = "#211d18", "#ddd4c2", "#fffdf7", "#14605a", "#b8b0a0"  # of report/page.css, but OTHER


def levels_lufs(result: Result, track: int, *, after: bool) -> np.ndarray:
    """Level of every step, in the source or in the stem, shape=(steps,)."""
    power = k_power(result.measurements, track).astype(np.float64)
    if after:
        gain = result.plan.tracks[track]
        at = np.arange(len(power)) + 0.5
        gain_db = np.interp(at, gain.hop, gain.gain_cdb / 100) + result.mix.make_up_db
        power = power * 10 ** (gain_db / 10)
    steps = len(power) // STEP_HOPS
    mean = power[: steps * STEP_HOPS].reshape(steps, STEP_HOPS).mean(axis=1)
    return -0.691 + 10 * np.log10(np.maximum(mean, 1e-12))


def drawing(result: Result) -> str:
    """The picture as SVG."""
    names = [track.name for track in result.session.tracks]
    own = result.activity.own
    height = TOP + len(names) * (ROW + GAP) + LABEL
    out = [f'<svg xmlns="http://www.w3.org/2000/svg" viewBox="0 0 {LEFT + 2 * WIDTH + 40} {height}" '
           f'font-family="sans-serif" font-size="13" fill="{INK}" role="img">',
           "<title>Levels of the three microphones before and after</title>",
           f'<rect width="100%" height="100%" fill="{SHEET}"/>']
    for side, heading in enumerate(("before: as recorded", "after: stems with make-up gain")):
        x = LEFT + side * (WIDTH + 24)
        out.append(f'<text x="{x}" y="22" font-weight="bold">{heading}</text>')
        for i, name in enumerate(names):
            y = TOP + i * (ROW + GAP)
            if side == 0:
                out.append(f'<text x="8" y="{y + ROW / 2 + 4}">{html.escape(name)}</text>')
            out += _row(levels_lufs(result, i, after=bool(side)), own[:, i], x, y)
    foot = height - 8
    out.append(f'<rect x="{LEFT}" y="{foot - 10}" width="12" height="10" fill="{OWN}"/>'
               f'<text x="{LEFT + 18}" y="{foot}">own voice</text>'
               f'<rect x="{LEFT + 110}" y="{foot - 10}" width="12" height="10" fill="{OTHER}"/>'
               f'<text x="{LEFT + 128}" y="{foot}">the others and the room</text>'
               f'<text x="{LEFT + 320}" y="{foot}">lines at {", ".join(map(str, LINES_LUFS))} LUFS; '
               f'{result.session.frames / result.session.rate_hz:.0f} s</text></svg>')
    return "\n".join(out) + "\n"


def _row(levels: np.ndarray, own: np.ndarray, x: float, y: float) -> list[str]:
    """One microphone's levels as bars, the others' first."""
    out = [f'<line x1="{x}" x2="{x + WIDTH}" y1="{_y(lufs, y):.1f}" y2="{_y(lufs, y):.1f}" stroke="{FAINT}"/>'
           for lufs in LINES_LUFS]
    for colour, wanted in ((OTHER, False), (OWN, True)):
        path = []
        for step, level in enumerate(levels):
            if bool(own[step * STEP_HOPS + STEP_HOPS // 2]) == wanted and level > BOTTOM_LUFS:
                at = x + WIDTH * (step + 0.5) / len(levels)
                path.append(f"M{at:.1f} {y + ROW}V{_y(min(level, TOP_LUFS), y):.1f}")
        out.append(f'<path d="{"".join(path)}" stroke="{colour}" stroke-width="{WIDTH / len(levels):.2f}"/>')
    return [*out, f'<line x1="{x}" x2="{x + WIDTH}" y1="{y + ROW}" y2="{y + ROW}" stroke="{INK}"/>']


def _y(lufs: float, top: float) -> float:
    """Where a level lies."""
    return top + ROW * (TOP_LUFS - lufs) / (TOP_LUFS - BOTTOM_LUFS)


def screenshot(page: Path, picture: Path, scratch: Path) -> None:
    """report.html as it opens; the page of the tests does the driving."""
    sys.path[:0] = [str(ROOT / "tests" / "report")]
    import browsing

    driver = browsing.start(scratch / "profile", scratch)
    try:
        shown = browsing.Page(driver)
        shown.open(page, width=1360, height=1000)
        shown.find("#pane")
        driver.save_screenshot(str(picture))
    finally:
        driver.quit()


def main() -> None:
    """Make both."""
    with tempfile.TemporaryDirectory() as scratch:
        out = Path(scratch) / "demo"
        result = process(ROOT / "demo_session", out=out)
        (HERE / "before_after.svg").write_text(drawing(result), encoding="utf-8")
        screenshot(out / "report.html", HERE / "report.png", Path(scratch))


if __name__ == "__main__":
    main()
