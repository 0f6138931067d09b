"""Pictures of a calibration: response, spectrum, unknowns, steps, drift, promise."""

from __future__ import annotations

from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np

from spectral.reporting import panels
from spectral.reporting.calibration_figures import (
    bin_responses,
    response_curves,
    unknowns,
)
from spectral.reporting.drawing import Picture, Sheet
from spectral.reporting.palette import (
    ACCENT,
    INK,
    MUTED,
    STANDBY,
    marker,
    material_colour,
    rank_colours,
)
from spectral.reporting.wording import GRAMS, fixed, listed, number, percent

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from spectral.calibration.result import Calibration, Promise

_LINES = ("-", "--", "-.", ":")
_SHARES = (0.28, 0.42, 0.58, 0.75, 0.92)


def response_picture(calibration: Calibration) -> Picture:
    """What a pixel makes of single photons, and what its bins see."""
    sheet = Sheet(3.4, columns=2)
    wanted = np.array(_SHARES) * calibration.voltage_kv
    energy, level, above = response_curves(calibration, wanted)
    left = sheet.axes[0]
    for i, (e, curve) in enumerate(zip(energy, above, strict=True)):
        left.plot(
            level, curve, color=rank_colours(energy.size)[i],
            linestyle=_LINES[i % len(_LINES)], label=f"{number(float(e))} keV",
        )  # fmt: skip
    _mark_levels(left, calibration)
    left.set_xlim(0.0, 1.15 * float(energy.max()))
    left.set_ylim(
        0.0, 1.08 * float(above[:, level >= 0.5 * calibration.levels_kev[0]].max())
    )
    left.legend(title="photon energy", title_fontsize=8.0, loc="right")
    panels.axis_words(
        left,
        x="level (keV)",
        y="mean counts above the level, per photon",
        title="pulse heights of single photons",
    )
    _draw_bins(sheet.axes[1], calibration)
    photons = listed([number(float(e)) for e in energy])
    levels = listed([number(float(v)) for v in calibration.levels_kev])
    return sheet.picture(
        alt=(
            f"Left: mean counts above each level for photons of {photons} keV, falling "
            "from low levels to the photon energy; vertical lines mark the average "
            f"pixel's thresholds at {levels} keV. Right: counts in each of "
            f"{calibration.levels_kev.size} bins per photon, against photon energy."
        ),
        caption=(
            "The average pixel at a vanishing rate, with electronic noise. More than "
            "one count per photon means that neighbours share its charge or its "
            "fluorescence. Grey lines: thresholds. A bin that sees nearly what its "
            "neighbour sees adds little."
        ),
    )


def _draw_bins(axes: Axes, calibration: Calibration) -> None:
    """What each bin counts per photon, against photon energy."""
    bins = bin_responses(calibration)
    for b, values in enumerate(bins):
        axes.plot(
            calibration.model.energy_kev, values, color=rank_colours(len(bins))[b],
            linestyle=_LINES[b % len(_LINES)], label=f"bin {b + 1}",
        )  # fmt: skip
    axes.set_ylim(bottom=0.0)
    axes.legend(loc="upper left", bbox_to_anchor=(1.0, 1.0))
    panels.axis_words(
        axes,
        x="photon energy (keV)",
        y="mean counts in the bin, per photon",
        title="what each bin sees",
    )


def _mark_levels(axes: Axes, calibration: Calibration) -> None:
    for k, level in enumerate(calibration.levels_kev):
        axes.axvline(float(level), color=STANDBY, linewidth=1.0)
        axes.annotate(
            str(k + 1), (float(level), 1.0), xycoords=("data", "axes fraction"),
            xytext=(2, -2), textcoords="offset points", va="top", fontsize=7.5,
            color=MUTED,
        )  # fmt: skip


def spectrum_picture(calibration: Calibration) -> Picture:
    """The open beam and what passes the stacks."""
    sheet = Sheet(2.9, width=7.4)
    axes = sheet.axes[0]
    model = calibration.model
    largest = calibration.largest
    cases = np.stack([0.0 * largest, 0.5 * largest, largest])
    passed = model.transmitted(cases)
    width = np.gradient(model.energy_kev)
    names = ("open beam", "half of the thickest stack", "thickest of every material")
    for i, (row, name) in enumerate(zip(passed, names, strict=True)):
        share = row / row.sum()
        middle = float(share @ model.energy_kev)
        axes.plot(
            model.energy_kev, share / width, color=rank_colours(3)[i],
            linestyle=_LINES[i],
            label=f"{name}: mean {number(middle)} keV, {percent(float(row.sum()))}",
        )  # fmt: skip
    axes.set_xlabel("photon energy (keV)")
    axes.set_ylabel("share of the photons per keV")
    axes.set_title("spectrum upon the detector, each to its own sum")
    axes.set_ylim(bottom=0.0)
    axes.legend(loc="upper left")
    panels.light_grid(axes)
    means = passed @ model.energy_kev / passed.sum(axis=1)
    return sheet.picture(
        alt=(
            "Spectra with mean energies of "
            f"{listed([number(float(v)) for v in means])} keV for "
            f"{listed(list(names))}."
        ),
        caption=(
            "As fitted; the tube's lines are as narrow as the model's energy grid. Per "
            "cent: photons that pass. The further the mean energy moves behind the "
            "stacks, the more the low bins lose against the high ones."
        ),
    )


def unknowns_picture(calibration: Calibration) -> Picture:
    """Unknowns of tube and sensor against what was expected."""
    found = [u for u in unknowns(calibration) if np.isfinite(u.pull) and not u.vague]
    sheet = Sheet(0.9 + 0.24 * len(found), width=8.6)
    axes = sheet.axes[0]
    place = np.arange(len(found))[::-1]
    axes.axvspan(
        -1.0,
        1.0,
        color=STANDBY,
        alpha=0.3,
        linewidth=0.0,
        label="prior, one standard deviation",
    )
    axes.axvline(0.0, color=MUTED, linewidth=0.8)
    axes.errorbar(
        [u.pull for u in found], place, xerr=[u.pull_error for u in found],
        fmt="o", color=INK, capsize=2.5, label="as fitted",
    )  # fmt: skip
    axes.set_yticks(place, [u.words for u in found])
    axes.set_xlabel("away from the prior mean, in the prior's standard deviations")
    axes.legend(ncols=2, loc="lower right", bbox_to_anchor=(1.0, 1.0))
    axes.set_ylim(-0.7, len(found) - 0.3)
    panels.light_grid(axes)
    far = [f"{u.words} {fixed(u.pull, 1, sign=True)}" for u in found if abs(u.pull) > 2]
    return sheet.picture(
        alt=(
            f"{len(found)} unknowns of tube and sensor against their priors. More than "
            f"two prior standard deviations away: {listed(far) if far else 'none'}."
        ),
        caption=(
            "Short bars: the scan taught it. Bars as long as the band: the prior alone "
            "speaks. A point far outside the band says that tube, filter or sensor is "
            "not what the scan names, or that the model lacks something there."
        ),
    )


def domain_picture(calibration: Calibration) -> Picture:
    """Which stacks taught the calibration."""
    steps = calibration.steps
    materials = calibration.materials
    pairs = list(combinations(range(len(materials)), 2)) or [(0, 0)]
    sheet = Sheet(3.3, columns=len(pairs), width=min(11.0, 5.2 * len(pairs)))
    currents = np.unique(steps.current_ma)
    for axes, (i, j) in zip(sheet.axes, pairs, strict=True):
        for c, current in enumerate(currents):
            at = steps.current_ma == current
            second = (
                steps.areal_density[at, j] if i != j else np.full(at.sum(), current)
            )
            axes.plot(
                steps.areal_density[at, i], second, linestyle="none",
                marker=marker(c), markerfacecolor="none", markeredgewidth=1.3,
                markersize=5.0 + 3.0 * c,
                color=material_colour(c), label=f"{current:g} mA",
            )  # fmt: skip
        axes.set_xlabel(f"{materials[i].name} ({GRAMS})")
        axes.set_ylabel(
            f"{materials[j].name} ({GRAMS})" if i != j else "tube current (mA)"
        )
        axes.margins(0.06)
        panels.light_grid(axes)
    sheet.axes[0].set_title("stacks of the wedge scan")
    sheet.axes[-1].legend(loc="upper left", bbox_to_anchor=(1.0, 1.0))
    tops = [
        f"{m.name} up to {number(float(a))} {GRAMS}"
        for m, a in zip(materials, calibration.largest, strict=True)
    ]
    return sheet.picture(
        alt=f"Areal densities of {steps.exposure.size} exposures: {listed(tops)}.",
        caption=(
            "Estimates outside the hull of these points are flagged: the calibration "
            "has seen nothing there."
        ),
    )


def drift_picture(calibration: Calibration) -> Picture:
    """Output of the tube from exposure to exposure."""
    steps = calibration.steps
    sheet = Sheet(2.6)
    axes = sheet.axes[0]
    spread = 100.0 * calibration.residual.drift_spread
    axes.axhspan(
        -spread, spread, color=STANDBY, alpha=0.3, linewidth=0.0,
        label="spread that fits best",
    )  # fmt: skip
    axes.axhline(0.0, color=MUTED, linewidth=0.8)
    is_open = (steps.areal_density == 0.0).all(axis=1)
    for at, words, shape, colour in (
        (is_open, "open", "o", ACCENT),
        (~is_open, "step", "s", INK),
    ):
        axes.plot(
            steps.exposure[at], 100.0 * steps.drift[at], linestyle="none",
            marker=shape, color=colour, label=words,
        )  # fmt: skip
    axes.legend(ncols=3, loc="lower right", bbox_to_anchor=(1.0, 1.0))
    axes.locator_params(axis="x", integer=True)
    panels.axis_words(
        axes,
        x="exposure (index in the scan)",
        y="tube output, % from its mean",
        title="output of the tube as found",
    )
    worst = int(np.abs(steps.drift).argmax())
    furthest = fixed(100 * float(steps.drift[worst]), 3, sign=True)
    return sheet.picture(
        alt=(
            f"Tube output of {steps.exposure.size} exposures: spread "
            f"{number(spread)} %, furthest {furthest} % in exposure "
            f"{steps.exposure[worst]}."
        ),
        caption=(
            "Found together with the residuals: what all bins of an exposure share is "
            "counted as output. A slope is a warming tube; a lone point is a wrong "
            "current or count time."
        ),
    )


def promise_picture(calibration: Calibration, promise: Promise) -> Picture:
    """What steps left out in turn come back as."""
    materials = calibration.materials
    sheet = Sheet(0.5 + 1.9 * len(materials), rows=len(materials))
    for i, (axes, material) in enumerate(zip(sheet.axes, materials, strict=True)):
        axes.fill_between(
            promise.exposure, -promise.single_error[:, i], promise.single_error[:, i],
            color=STANDBY, alpha=0.35, linewidth=0.0, step="mid",
            label="± error of one pixel in one exposure",
        )  # fmt: skip
        axes.axhline(0.0, color=MUTED, linewidth=0.8)
        axes.plot(
            promise.exposure, promise.bias[:, i], linestyle="none", marker=marker(i),
            color=material_colour(i), label="mean of all pixels, minus truth",
        )  # fmt: skip
        axes.set_title(material.name)
        axes.set_ylabel(GRAMS)
        axes.locator_params(axis="x", integer=True)
        panels.light_grid(axes)
    sheet.axes[0].legend(ncols=2, loc="lower right", bbox_to_anchor=(1.0, 1.0))
    sheet.axes[-1].set_xlabel("exposure that was left out (index in the scan)")
    biases = np.sqrt(np.mean(promise.bias**2, axis=0))
    words = [
        f"{m.name} {number(float(bias), 2)} {GRAMS}"
        for m, bias in zip(materials, biases, strict=True)
    ]
    return sheet.picture(
        alt=(
            f"Bias of {promise.exposure.size} steps, each left out of its calibration: "
            f"root mean square {listed(words)}."
        ),
        caption=(
            "Each step was decomposed with a calibration that had not seen it. A point "
            "far from zero names a step that the others contradict, or one at the edge "
            "of the domain."
        ),
    )
