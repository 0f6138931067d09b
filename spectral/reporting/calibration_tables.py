"""Tables about a calibration."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting.calibration_figures import Thresholds, unknowns
from spectral.reporting.calibration_pictures import PIXEL_REASONS
from spectral.reporting.page import Table
from spectral.reporting.reason_map import reason_colour
from spectral.reporting.wording import (
    GRAMS,
    NONE,
    SIGMA,
    fixed,
    number,
    percent,
    with_error,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration, Promise


def promise_table(calibration: Calibration, promise: Promise) -> Table:
    """What steps left out in turn came back as."""
    rows = []
    for i, m in enumerate(calibration.materials):
        bias, single = promise.bias[:, i], promise.single_error[:, i]
        worst = int(np.abs(bias).argmax())
        largest = number(float(bias[worst]), sign=True)
        rows.append(
            (
                m.name,
                number(rms(promise.bias)[i]),
                f"{largest} (exposure {promise.exposure[worst]})",
                number(float(np.median(single))),
                fixed(float(np.sqrt(np.mean((bias / single) ** 2))), 3),
                fixed(float(promise.fixed_pattern[i]), 3),
            )
        )
    return Table(
        caption=f"What the calibration expects of itself, in {GRAMS}",
        header=(
            "material",
            "bias, root mean square",
            "largest bias",
            "error of one pixel in one exposure, median",
            "bias over that error, root mean square",
            "fixed pattern over that error",
        ),
        rows=rows,
    )


def threshold_table(found: Thresholds) -> Table:
    """Mean, spread and error of each threshold."""
    rows = [
        (
            f"{k + 1}",
            number(float(found.nominal[k])),
            with_error(float(found.mean[k]), float(found.mean_error[k]), sign=True),
            fixed(float(found.spread[k]), 3),
            fixed(float(found.pixel_error[k]), 3),
        )
        for k in range(found.nominal.size)
    ]
    return Table(
        caption="Thresholds of the good pixels, in keV",
        header=(
            "threshold",
            "setting",
            "true minus setting, mean",
            "spread between pixels",
            "error of a single pixel, median",
        ),
        rows=rows,
    )


def reasons_table(reasons: NDArray[np.uint16]) -> Table:
    """How many pixels each reason takes."""
    every = PIXEL_REASONS
    counts = [int(np.count_nonzero(reasons & r.bit)) for r in every]
    return Table(
        caption="Reasons not to use a pixel",
        header=("reason", "what it says", "pixels", "share"),
        rows=[
            (r.name, r.meaning, str(n), percent(n / reasons.size, 2))
            for r, n in zip(every, counts, strict=True)
        ],
        words=frozenset({1}),
        swatches=[reason_colour(every, r) for r in every],
    )


def unknowns_table(calibration: Calibration) -> Table:
    """Unknowns of tube and sensor beside what was expected."""
    return Table(
        caption="Tube and sensor as fitted, and as expected beforehand",
        header=("unknown", "unit", "fitted", "expected", "away, in prior spreads"),
        rows=[
            (
                u.words,
                u.unit or NONE,
                with_error(u.value, u.error),
                u.expected,
                NONE if u.vague else fixed(u.pull, 1, sign=True),
            )
            for u in unknowns(calibration)
        ],
        words=frozenset({1}),
    )


def steps_table(calibration: Calibration) -> Table:
    """The exposures that taught the calibration."""
    steps = calibration.steps
    worst = (steps.residual / steps.error)[
        np.arange(steps.exposure.size),
        np.abs(steps.residual / steps.error).argmax(axis=1),
    ]
    return Table(
        caption="Open and wedge exposures that taught the calibration",
        header=(
            "exposure",
            *(f"{m.name} ({GRAMS})" for m in calibration.materials),
            "current (mA)",
            "time (s)",
            "tube output (%)",
            f"largest residual ({SIGMA})",
        ),
        rows=[
            (
                str(int(steps.exposure[i])),
                *(number(float(a), 4) for a in steps.areal_density[i]),
                f"{steps.current_ma[i]:g}",
                f"{steps.count_time_s[i]:g}",
                fixed(100.0 * float(steps.drift[i]), 3, sign=True),
                fixed(float(worst[i]), 1, sign=True),
            )
            for i in range(steps.exposure.size)
        ],
    )


def rms(values: NDArray[np.float64]) -> list[float]:
    """Root mean square of each column."""
    return [float(v) for v in np.sqrt(np.mean(values**2, axis=0))]
