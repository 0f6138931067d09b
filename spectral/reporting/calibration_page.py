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
from spectral.reporting.calibration_tables import (
    promise_table,
    reasons_table,
    rms,
    steps_table,
    threshold_table,
    unknowns_table,
)
from spectral.reporting.maps_summary import median
from spectral.reporting.page import KeyFigure, Page, Section
from spectral.reporting.wording import (
    GRAMS,
    SIGMA,
    count,
    fixed,
    listed,
    number,
    percent,
    with_error,
)

if TYPE_CHECKING:
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
    pixels = (
        f"{percent(good / every)} of the pixels can be used ({good} of {every}). Their "
        f"mean counts behind {count(calibration.steps.exposure.size, 'exposure')} are "
        f"met to {percent(after.share, 3)}, {fixed(after.sigmas, 2)} times the "
        f"counting error; the physics alone meets them to {percent(before.share, 2)}."
    )
    levels = (
        f"On average the thresholds lie {fixed(float(found.mean[low]), 2, sign=True)} "
        f"keV (threshold {low + 1}) to "
        f"{fixed(float(found.mean[high]), 2, sign=True)} keV (threshold {high + 1}) "
        "from their settings. Pixels spread about that by "
        f"{fixed(float(np.median(found.spread)), 2)} keV, and each is known to "
        f"{fixed(float(np.median(found.pixel_error)), 2)} keV."
    )
    domain = (
        f"It holds for {domain_words(calibration)}, at up to "
        f"{calibration.largest_current_ma:g} mA."
    )
    said = [pixels, levels, domain]
    promise = calibration.promise
    if promise is None:
        said.append("It was not put to the test of steps left out.")
        return said
    parts = [
        f"{m.name} {number(rms, 2)} {GRAMS}"
        for m, rms in zip(calibration.materials, rms(promise.bias), strict=True)
    ]
    said.append(
        f"Steps that it had not seen come back with a root-mean-square bias of "
        f"{listed(parts)}."
    )
    return said


def _look(seen: _Seen) -> list[str]:
    calibration = seen.calibration
    look = list(calibration.findings)
    steps = calibration.steps
    sigmas = np.abs(steps.residual / steps.error).max(axis=1)
    names = step_names(calibration)
    odd = [i for i in np.argsort(-sigmas) if sigmas[i] > _ODD_RESIDUAL]
    if odd:
        said = [
            f"exposure {steps.exposure[i]} ({names[i]}), "
            f"{fixed(float(sigmas[i]), 1)} {SIGMA}"
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
            calibration.materials,
            rms(promise.bias),
            promise.fixed_pattern,
            strict=True,
        )
    ]


def _sections(seen: _Seen) -> list[Section]:
    calibration = seen.calibration
    return [
        Section(
            title="Thresholds",
            parts=[
                *pictures.threshold_pictures(seen.thresholds),
                threshold_table(seen.thresholds),
            ],
        ),
        Section(
            title="Residuals by step and bin",
            parts=[pictures.residual_picture(calibration)],
        ),
        _promise_section(calibration),
        _pixels_section(calibration),
        Section(
            title="Response and spectrum",
            parts=[
                curves.response_picture(calibration),
                curves.spectrum_picture(calibration),
            ],
        ),
        Section(
            title="Tube and sensor",
            parts=[curves.unknowns_picture(calibration), unknowns_table(calibration)],
        ),
        Section(
            title="Steps and drift",
            parts=[
                curves.domain_picture(calibration),
                curves.drift_picture(calibration),
                steps_table(calibration),
            ],
        ),
    ]


def _pixels_section(calibration: Calibration) -> Section:
    return Section(
        title="Pixels",
        parts=[
            pictures.reasons_picture(calibration.pixel_reasons),
            reasons_table(calibration.pixel_reasons),
            pictures.pixels_picture(calibration),
            pictures.deviance_histogram(calibration),
        ],
    )


def _promise_section(calibration: Calibration) -> Section:
    promise = calibration.promise
    title = "Steps left out"
    if promise is None:
        return Section(
            title=title,
            parts=["The promise was not worked out for this calibration."],
        )
    table = promise_table(calibration, promise)
    return Section(
        title=title, parts=[curves.promise_picture(calibration, promise), table]
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
