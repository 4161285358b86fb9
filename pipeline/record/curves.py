"""The curves a report draws, thinned to what a figure can show."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from pipeline.record.files import RESPONSE_POINTS, SERIES_ROWS, thinned_rows
from pipeline.record.schema import LoadResponse, PredictionInfo, Series, SetpointResponse

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from fitters.fit import BumpData, Choice
    from pipeline.intake.log import Log
    from pipeline.loop.types import Prediction, Trajectory
    from pipeline.tuning.types import Bands


def prediction_info(prediction: Prediction, bands: Bands | None) -> PredictionInfo:
    """Give the predicted steps, thinned to what a figure can show.

    Parameters
    ----------
    prediction : Prediction
    bands : Bands or None
        Band of the set-point step.
    """
    setpoint = prediction.setpoint
    t, pv, co = thin_trajectory(setpoint)
    low = high = None
    if bands is not None:
        low = np.interp(t, bands.t, bands.low)
        high = np.interp(t, bands.t, bands.high)
    load_t, load_pv, load_co = thin_trajectory(prediction.load)
    return PredictionInfo(
        overshoot_pct=prediction.overshoot,
        rise_s=prediction.rise_time,
        settling_s=prediction.settling_time,
        load_peak=prediction.load_peak,
        load_integrated_error=prediction.load_integrated_error,
        co_peak=prediction.co_peak,
        noise_gain=prediction.noise_gain,
        setpoint=SetpointResponse.model_validate({"t_s": t, "pv": pv, "co": co, "low": low, "high": high}),
        load=LoadResponse.model_validate({"t_s": load_t, "pv": load_pv, "co": load_co}),
    )


def series(log: Log, choice: Choice | None, pv_unit: str | None, co_unit: str | None) -> Series:
    """Give the log as the figures show it, with the fit where it reaches.

    Parameters
    ----------
    log : Log
    choice : Choice or None
        The fit and the rows it rests on.
    pv_unit, co_unit : str or None
    """
    rows = np.asarray(thinned_rows(log.co.tolist(), log.pv.tolist(), limit=SERIES_ROWS))
    fitted = residual = None
    if choice is not None:
        fitted = _at_rows(log.t[rows], choice.data, choice.best.fitted)
        residual = log.pv[rows] - fitted
    return Series.model_validate(
        {
            "t_s": log.t[rows],
            "pv": log.pv[rows],
            "co": log.co[rows],
            "fitted": fitted,
            "residual": residual,
            "pv_unit": pv_unit,
            "co_unit": co_unit,
        }
    )


def thin_trajectory(
    trajectory: Trajectory,
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    """Give t, PV and CO of a response, thinned to what a figure can show.

    Parameters
    ----------
    trajectory : Trajectory
    """
    count = trajectory.t.size
    if count <= RESPONSE_POINTS:
        return trajectory.t, trajectory.pv, trajectory.co
    rows = np.unique(np.round(np.linspace(0, count - 1, RESPONSE_POINTS)).astype(int))
    return trajectory.t[rows], trajectory.pv[rows], trajectory.co[rows]


def _at_rows(wanted: NDArray[np.float64], data: BumpData, values: NDArray[np.float64]) -> NDArray[np.float64]:
    """Take the fit at the shown rows; NaN where no fitted row is that one.

    Between rows that are means of many it is read off: they lie close against what the fit does.
    """
    t = data.t
    if np.any(data.weight > 1.0):
        return np.interp(wanted, t, values, left=np.nan, right=np.nan)
    place = np.clip(np.searchsorted(t, wanted), 0, t.size - 1)
    same = np.isclose(t[place], wanted, rtol=0.0, atol=1e-9 * max(float(t[-1]), 1.0))
    return np.where(same, values[place], np.nan)
