"""Throughput over time: picks and arrivals a minute, over a span that slides along."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pipeline.account.windows import windows_of
from pipeline.replay import Run, Setting

FloatArray = NDArray[np.float64]
SPAN_S = 15.0
POINTS = 240


@dataclass(frozen=True)
class Pace:
    """Picks and arrivals a minute (n,) over the span_s up to times_s (n,), and what was picked over all."""

    times_s: FloatArray
    picks_per_min: FloatArray
    arrivals_per_min: FloatArray
    mean_per_min: float
    span_s: float


def pace_of(run: Run, setting: Setting) -> Pace:
    """The pace of a run. A pick counts when its part is released, an arrival when the part enters the window."""
    duration = run.end_s - run.start_s
    span = min(SPAN_S, max(duration, 1e-6))
    times = np.linspace(run.start_s, run.end_s, POINTS)
    released = np.array([pick.release_end_s for pick in run.picks])
    entered = np.array([window.enters_s for window in windows_of(setting)])
    return Pace(times, _rate(released, times, span, run.start_s), _rate(entered, times, span, run.start_s),
                60 * len(released) / duration if duration > 0 else 0.0, span)


def _rate(events: FloatArray, times: FloatArray, span: float, start: float) -> FloatArray:
    """Events a minute in the span before each time; less than the span where the run has only begun."""
    events = np.sort(events[np.isfinite(events)])
    begin = np.maximum(times - span, start)
    many = np.searchsorted(events, times, "right") - np.searchsorted(events, begin, "right")
    lasted = np.maximum(times - begin, span / 3)  # so that the first pick does not count as hundreds a minute
    return np.asarray(60.0 * many / lasted)
