"""A Result -> one frozen `Report`: the figures every report prints.

Nothing is measured here that the run has not measured: the mix as written, the hop grid, the plan. Records and rounding
stand in `records`.
"""

from __future__ import annotations

import dataclasses
from typing import TYPE_CHECKING

import numpy as np

from leveller.plan.levels import level_lufs
from leveller.render.mix import Mix
from leveller.report.faults import faults_of, left_open
from leveller.report.records import (
    DeliveryFigures,
    Fault,
    MixFigures,
    OtherFigures,
    Report,
    Run,
    VoiceFigures,
    loudness_figures,
)
from leveller.report.voices import other_figures, voice_figures

if TYPE_CHECKING:
    from leveller.pipeline import Result

__all__ = ["DeliveryFigures", "Fault", "MixFigures", "OtherFigures", "Report", "VoiceFigures",
           "figures_of"]


def figures_of(result: Result) -> Report:
    """All figures of a run.

    Parameters
    ----------
    result : pipeline.Result

    Returns
    -------
    Report
    """
    voices = voice_figures(result)
    report = Report(
        title=result.session.title, delivery=delivery_figures(result.mix),
        mix=mix_figures(result, speech_lufs=_speech_lufs(result)), voices=voices,
        others=other_figures(result), faults=faults_of(result, voices), left_open=())
    return dataclasses.replace(report, left_open=left_open(report, result))


def delivery_figures(mix: Mix) -> DeliveryFigures:
    """What was asked for, and whether it is met."""
    asked = mix.delivery
    return DeliveryFigures(
        name=asked.name, source=asked.source, met=mix.met, why_not="" if mix.met else _why_not(mix),
        target_lufs=asked.target_lufs, ceiling_dbtp=asked.ceiling_dbtp)


def _why_not(mix: Mix) -> str:
    """Why a delivery is not met, in one sentence."""
    asked = mix.delivery
    return mix.reason or (f"the mix reads {mix.loudness.integrated_lufs:.2f} LUFS and {mix.true_peak_dbtp:.2f} dBTP, "
                          f"asked for are {asked.target_lufs:g} LUFS and at most {asked.ceiling_dbtp:g} dBTP")


def mix_figures(run: Run, *, speech_lufs: float | None) -> MixFigures:
    """Figures of the mix."""
    mix, limiting, rate_hz = run.mix, run.mix.limiting, run.session.rate_hz
    return MixFigures(
        **loudness_figures(
            mix.loudness, true_peak_dbtp=mix.true_peak_dbtp, true_peak_s=mix.true_peak_s, channels=mix.channels,
            rate_hz=rate_hz, length_s=run.session.frames / rate_hz),
        speech_lufs=speech_lufs, make_up_db=mix.make_up_db,
        limiting_most_db=limiting.most_db, limiting_most_s=limiting.most_s, limiting_total_s=limiting.limited_s,
        limiting_heavy_pct=100 * limiting.heavy_share)


def _speech_lufs(result: Result) -> float | None:
    """Loudness of the mix while somebody speaks."""
    cells = result.mix.loudness.cells
    spoken = (result.activity.own.any(axis=1) & result.activity.programme)[: len(cells)]
    return level_lufs(cells[: len(spoken)], np.asarray(spoken))
