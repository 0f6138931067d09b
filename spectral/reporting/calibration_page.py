"""The page about a calibration: can it be used, how far, and what moved."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import PurePath
from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting import calibration_curves as curves
from spectral.reporting import calibration_pictures as pictures
from spectral.reporting.calibration_figures import (
    Thresholds,
    domain_words,
    of_pixels,
    residual_size,
    step_names,
    thresholds,
    unknowns,
)
from spectral.reporting.maps_summary import median
from spectral.reporting.page import KeyFigure, Page, Section, Table
from spectral.reporting.panels import reason_colour
from spectral.reporting.wording import (
    GRAMS,
    NONE,
    SIGMA,
    count,
    fixed,
    listed,
    number,
    percent,
    with_error,
)

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.calibration.result import Calibration, Promise

_ODD_RESIDUAL = 4.0
_ODD_PULL = 2.5
_ODD_DEVIANCE = 1.25
_MOST_NAMED = 3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Seen:
    """A calibration with the figures that several parts of the page use."""

    calibration: Calibration
    thresholds: Thresholds


def calibration_page(calibration: Calibration, *, name: str = "") -> Page:
    """The page about a calibration.

    Parameters
    ----------
    calibration : Calibration
    name : str
        File that it came from.
    """
    seen = _Seen(calibration=calibration, thresholds=thresholds(calibration))
    y, x = calibration.shape
    of = PurePath(calibration.scan_source).name or "a wedge scan"
    return Page(
        kind=(
            f"Calibration, {y} by {x} pixels, {calibration.thresholds_kev.size} "
            f"thresholds, {calibration.voltage_kv:g} kV"
        ),
        title=f"{listed([m.name for m in calibration.materials])} from {of}",
        said=_said(seen),
        look=_look(seen),
        figures=_key_figures(seen),
        sections=_sections(seen),
        assumed=_assumed(calibration),
        record=(
            ("calibration", name or "calibration in memory"),
            ("SHA-256 of the calibration", calibration.digest),
            ("wedge scan", calibration.scan_source),
            ("SHA-256 of the wedge scan", calibration.scan_digest),
            ("made by", f"wedgewright {calibration.version}"),
            ("date", calibration.created),
            ("cross sections", calibration.cross_sections),
        ),
    )


def _said(seen: _Seen) -> list[str]:
    calibration = seen.calibration
    after = residual_size(calibration, corrected=True)
    before = residual_size(calibration, corrected=False)
    found = seen.thresholds
    low, high = int(found.mean.argmin()), int(found.mean.argmax())
    good, every = int(calibration.good.sum()), calibration.good.size
    said = [
        f"{percent(good / every)} of the pixels can be used ({good} of {every}). Their "
        f"mean counts behind {count(calibration.steps.exposure.size, 'exposure')} are "
        f"met to {percent(after.share, 3)}, {fixed(after.sigmas, 2)} times the counting "
        f"error; the physics alone meets them to {percent(before.share, 2)}.",
        f"On average the thresholds lie {fixed(float(found.mean[low]), 2, sign=True)} keV "
        f"(threshold {low + 1}) to {fixed(float(found.mean[high]), 2, sign=True)} keV "
        f"(threshold {high + 1}) from their settings. Pixels spread about that by "
        f"{fixed(float(np.median(found.spread)), 2)} keV, and each is known to "
        f"{fixed(float(np.median(found.pixel_error)), 2)} keV.",
        f"It holds for {domain_words(calibration)}, at up to "
        f"{calibration.largest_current_ma:g} mA.",
    ]
    promise = calibration.promise
    if promise is None:
        said.append("It was not put to the test of steps left out.")
        return said
    parts = [
        f"{m.name} {number(rms, 2)} {GRAMS}"
        for m, rms in zip(calibration.materials, _rms(promise.bias), strict=True)
    ]
    said.append(
        f"Steps that it had not seen come back with a root-mean-square bias of "
        f"{listed(parts)}."
    )
    return said


def _rms(values: NDArray[np.float64]) -> list[float]:
    return [float(v) for v in np.sqrt(np.mean(values**2, axis=0))]


def _look(seen: _Seen) -> list[str]:
    calibration = seen.calibration
    look = list(calibration.findings)
    steps = calibration.steps
    sigmas = np.abs(steps.residual / steps.error).max(axis=1)
    names = step_names(calibration)
    odd = [i for i in np.argsort(-sigmas) if sigmas[i] > _ODD_RESIDUAL]
    if odd:
        said = [
            f"exposure {steps.exposure[i]} ({names[i]}), {fixed(float(sigmas[i]), 1)} {SIGMA}"
            for i in odd[:_MOST_NAMED]
        ]
        more = f", and {len(odd) - _MOST_NAMED} more" if len(odd) > _MOST_NAMED else ""
        look.append(f"Not met within the counting error: {listed(said)}{more}.")
    far = [u for u in unknowns(calibration) if abs(u.pull) > _ODD_PULL]
    for u in sorted(far, key=lambda u: -abs(u.pull))[:_MOST_NAMED]:
        unit = f" {u.unit}" if u.unit else ""
        look.append(
            f"The {u.words} came out at {with_error(u.value, u.error)}{unit}; "
            f"{u.expected}{unit} was expected."
        )
    deviance = median(of_pixels(calibration)["deviance"])
    if deviance > _ODD_DEVIANCE:
        look.append(
            f"The pixels' own fits have a median deviance of {number(deviance)} per "
            "degree of freedom, counting alone gives 1: the pixels differ in ways that "
            "the model does not hold."
        )
    return look


def _key_figures(seen: _Seen) -> list[KeyFigure]:
    calibration = seen.calibration
    after = residual_size(calibration, corrected=True)
    good = float(np.mean(calibration.good))
    deviance = median(of_pixels(calibration)["deviance"])
    error = calibration.unknown_errors.get("ln_noise", np.nan)
    noise = calibration.model.noise_kev
    figures = [
        KeyFigure(
            name="pixels that can be used",
            text=percent(good),
            remark=f"{calibration.good.sum()} of {calibration.good.size}",
            value=good,
        ),
        KeyFigure(
            name="mean counts met to",
            text=percent(after.share, 3),
            remark=f"{fixed(after.sigmas, 2)} times the counting error",
            value=after.share,
        ),
        KeyFigure(
            name="median deviance of a pixel's fit",
            text=number(deviance),
            remark="per degree of freedom; counting alone: 1",
            value=deviance,
        ),
        KeyFigure(
            name="dead time of the average pixel",
            text=f"{number(calibration.dead_time_ns)} ns",
            value=calibration.dead_time_ns,
        ),
        KeyFigure(
            name="electronic noise",
            text=f"{with_error(noise, noise * error)} keV",
            remark="standard deviation",
            value=noise,
        ),
    ]
    if calibration.promise is not None:
        figures += _promise_figures(calibration, calibration.promise)
    return figures


def _promise_figures(calibration: Calibration, promise: Promise) -> list[KeyFigure]:
    return [
        KeyFigure(
            name=f"{m.name}: bias of unseen steps",
            text=f"{number(bias, 2)} {GRAMS}",
            remark=(
                f"root mean square; fixed pattern {fixed(float(pattern), 2)} of a "
                "single exposure's error"
            ),
            value=bias,
        )
        for m, bias, pattern in zip(
            calibration.materials, _rms(promise.bias), promise.fixed_pattern, strict=True
        )
    ]


def _sections(seen: _Seen) -> list[Section]:
    calibration = seen.calibration
    sections = [
        Section(
            title="Thresholds",
            parts=[
                *pictures.threshold_pictures(seen.thresholds),
                _threshold_table(seen.thresholds),
            ],
        ),
        Section(
            title="Residuals by step and bin",
            parts=[pictures.residual_picture(calibration)],
        ),
        _promise_section(calibration),
        Section(
            title="Pixels",
            parts=[
                pictures.reasons_picture(calibration.pixel_reasons),
                reasons_table(calibration.pixel_reasons),
                pictures.pixels_picture(calibration),
                pictures.deviance_histogram(calibration),
            ],
        ),
        Section(
            title="Response and spectrum",
            parts=[
                curves.response_picture(calibration),
                curves.spectrum_picture(calibration),
            ],
        ),
        Section(
            title="Tube and sensor",
            parts=[curves.unknowns_picture(calibration), _unknowns_table(calibration)],
        ),
        Section(
            title="Steps and drift",
            parts=[
                curves.domain_picture(calibration),
                curves.drift_picture(calibration),
                _steps_table(calibration),
            ],
        ),
    ]
    return sections


def _promise_section(calibration: Calibration) -> Section:
    promise = calibration.promise
    title = "Steps left out"
    if promise is None:
        return Section(
            title=title,
            parts=["The promise was not worked out for this calibration."],
        )
    rows = []
    for i, m in enumerate(calibration.materials):
        bias, single = promise.bias[:, i], promise.single_error[:, i]
        worst = int(np.abs(bias).argmax())
        rows.append(
            (
                m.name,
                number(_rms(promise.bias)[i]),
                f"{number(float(bias[worst]), sign=True)} (exposure {promise.exposure[worst]})",
                number(float(np.median(single))),
                fixed(float(np.sqrt(np.mean((bias / single) ** 2))), 3),
                fixed(float(promise.fixed_pattern[i]), 3),
            )
        )
    table = Table(
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
    return Section(title=title, parts=[curves.promise_picture(calibration, promise), table])


def _threshold_table(found: Thresholds) -> Table:
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
    every = pictures.PIXEL_REASONS
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


def _unknowns_table(calibration: Calibration) -> Table:
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


def _steps_table(calibration: Calibration) -> Table:
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


def _assumed(calibration: Calibration) -> list[str]:
    filters = listed(list(calibration.filters)) if calibration.filters else "none named"
    return [
        f"tube voltage {calibration.voltage_kv:g} kV, nominal",
        f"beam filters: {filters}",
        f"sensor: {calibration.sensor}",
        *(
            f"{m.name}: {m.formula}, {m.density_g_cm3:g} g/cm3"
            for m in calibration.materials
        ),
        *calibration.assumptions,
    ]
