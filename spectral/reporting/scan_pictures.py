"""Pictures of a scan."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from matplotlib.lines import Line2D

from spectral.reporting import panels
from spectral.reporting.drawing import Picture, Sheet
from spectral.reporting.maps_pictures import map_height
from spectral.reporting.maps_summary import median
from spectral.reporting.palette import (
    INK,
    MUTED,
    STANDBY,
    amount_scale,
    marker,
    rank_colours,
)
from spectral.reporting.scan_figures import (
    attenuations,
    brightest_opens,
    loss_sentence,
    middle_half_width,
)
from spectral.reporting.wording import (
    GRAMS,
    count,
    fixed,
    listed,
    number,
)
from spectral.scans.scan import ROLES

if TYPE_CHECKING:
    from numpy.typing import NDArray

    from spectral.reporting.scan_figures import ScanFigures
    from spectral.scans.scan import Scan
    from spectral.scans.scan_check import ScanCheck

_ROLE_MARKERS = dict(zip(ROLES, ("x", "o", "s", "^"), strict=True))
_MOST_GROUPS = 8
_MOST_SETTINGS = 4


def course_picture(scan: Scan, figures: ScanFigures) -> Picture:
    """What every exposure counts at every threshold."""
    n, k = figures.mean.shape
    sheet = Sheet(3.4)
    axes = sheet.axes[0]
    place = np.arange(n)
    for t, colour in enumerate(rank_colours(k)):
        values = np.where(figures.median[:, t] > 0.0, figures.median[:, t], np.nan)
        axes.plot(place, values, color=colour, linewidth=0.8)
        for role, shape in _ROLE_MARKERS.items():
            at = scan.exposures(role)
            axes.plot(
                at, values[at], linestyle="none", marker=shape, color=colour,
                markersize=4.0,
            )  # fmt: skip
    axes.set_yscale("log")
    axes.set_xlim(-0.6, n - 0.4)
    axes.locator_params(axis="x", integer=True)
    panels.axis_words(
        axes, x="exposure (index in the scan)", y="counts of the median pixel"
    )
    sheet.figure.legend(handles=_course_legend(scan), loc="outside right upper")
    lit = [i for i, r in enumerate(scan.role) if r != "dark"]
    low = float(np.min(np.nan_to_num(figures.median[lit, -1]), initial=np.inf))
    low = low if lit else 0.0
    high = float(np.max(np.nan_to_num(figures.median[lit, 0]), initial=0.0))
    return sheet.picture(
        alt=(
            f"Counts of the median pixel in {count(n, 'exposure')} at {k} thresholds, "
            f"with beam between {number(low)} and {number(high)}."
        ),
        caption=(
            "Exposures that count nothing are left out of the logarithmic scale. Lines "
            "that cross name thresholds in the wrong order; a lone jump is a wrong "
            "current, time or step."
        ),
    )


def _course_legend(scan: Scan) -> list[Line2D]:
    """A line for each threshold, a marker for each role."""
    colours = rank_colours(scan.thresholds_kev.size)
    lines = [
        Line2D([], [], color=c, label=f"above {number(float(e))} keV")
        for c, e in zip(colours, scan.thresholds_kev, strict=True)
    ]
    roles = [
        Line2D([], [], color=MUTED, linestyle="none", marker=shape, label=role)
        for role, shape in _ROLE_MARKERS.items()
        if role in scan.role
    ]
    return [*lines, *roles]


def steps_picture(scan: Scan, figures: ScanFigures) -> Picture | None:
    """Attenuation against what the scan says stood in the beam."""
    wedge, attenuation = attenuations(scan, figures)
    if wedge.size == 0:
        return None
    areal = scan.areal_density[wedge]
    first = int(np.argmax([np.unique(a).size for a in areal.T]))
    others = np.delete(areal, first, axis=1)
    groups, group = np.unique(others.round(6), axis=0, return_inverse=True)
    group = group.ravel()
    shown = (0,) if attenuation.shape[1] == 1 else (0, attenuation.shape[1] - 1)
    sheet = Sheet(3.4, columns=len(shown), width=5.8 * len(shown) - 0.6)
    for axes, t in zip(sheet.axes, shown, strict=True):
        for g, colour in enumerate(rank_colours(len(groups))):
            at = np.flatnonzero(group == g)
            at = at[np.argsort(areal[at, first])]
            axes.plot(
                areal[at, first], attenuation[at, t], color=colour, linewidth=1.0,
                marker=marker(g), label=_group_name(scan, groups[g], first),
            )  # fmt: skip
        axes.set_title(f"above {number(float(scan.thresholds_kev[t]))} keV")
        axes.set_xlabel(f"{scan.materials[first].name} ({GRAMS})")
        axes.set_ylabel("ln (open / step)")
        panels.light_grid(axes)
    if 1 < len(groups) <= _MOST_GROUPS:
        sheet.axes[0].legend(loc="best", title=GRAMS, title_fontsize=8.0)
    return sheet.picture(
        alt=(
            f"Attenuation of {count(int(wedge.size), 'wedge exposure')} against "
            f"{scan.materials[first].name}, from "
            f"{number(float(attenuation[:, 0].min()))} to "
            f"{number(float(attenuation[:, 0].max()))} at the lowest threshold."
        ),
        caption=(
            "Points of one colour share the other materials. Each line should rise "
            "smoothly and lie above the one with less of the other material: a kink "
            "is a step with a wrong label."
        ),
    )


def _group_name(scan: Scan, values: NDArray[np.float64], first: int) -> str:
    """The materials that the points of one line share."""
    names = [m.name for i, m in enumerate(scan.materials) if i != first]
    return listed(
        [f"{name} {number(float(v))}" for name, v in zip(names, values, strict=True)]
    )


def current_picture(
    scan: Scan, figures: ScanFigures, check: ScanCheck
) -> Picture | None:
    """Open counts per mA against the current: the counting loss."""
    if scan.current_ma is None:
        return None
    opens = scan.exposures("open")
    opens = opens[(scan.current_ma[opens] > 0.0) & (figures.mean[opens, 0] > 0.0)]
    current = scan.current_ma[opens]
    if np.unique(current).size < 2:
        return None
    sheet = Sheet(2.9, width=7.4)
    axes = sheet.axes[0]
    k = scan.shape[1]
    reference = opens[current == current.min()]
    for t, colour in enumerate(rank_colours(k)):
        level = float(figures.per_mas[reference, t].mean())
        if not level > 0.0:
            continue
        axes.plot(
            current, 100.0 * (figures.per_mas[opens, t] / level - 1.0),
            linestyle="none", marker=marker(t), color=colour,
            label=f"above {number(float(scan.thresholds_kev[t]))} keV",
        )  # fmt: skip
    axes.axhline(0.0, color=MUTED, linewidth=0.8)
    panels.axis_words(
        axes,
        x="tube current (mA)",
        y="% from the lowest current",
        title="open exposures: counts per mA s",
    )
    axes.legend(loc="upper left", bbox_to_anchor=(1.02, 1.0))
    words = _loss_words(check)
    return sheet.picture(
        alt=f"Open counts per current and time against tube current; {words}.",
        caption=(
            f"{words[0].upper()}{words[1:]}. Overlapping pulses pull the low "
            "thresholds down; at high ones two small pulses may pass for a large one "
            "and pull them up."
        ),
    )


def _loss_words(check: ScanCheck) -> str:
    if check.loss is None:
        return "no dead time was found"
    return loss_sentence(check.loss)


def drift_picture(scan: Scan, figures: ScanFigures) -> Picture | None:
    """Open exposures of the brightest setting, first to last."""
    opens = brightest_opens(scan, figures.mean)
    if opens.size < 2 or not figures.mean[opens[0], 0] > 0.0:
        return None
    sheet = Sheet(2.5, width=9.0)
    axes = sheet.axes[0]
    axes.axhline(0.0, color=MUTED, linewidth=0.8)
    sound = max(int(scan.shape[2] * scan.shape[3]), 1)
    for t, colour in enumerate(rank_colours(scan.shape[1])):
        values = figures.mean[opens, t]
        if not values[0] > 0.0:
            continue
        axes.errorbar(
            opens, 100.0 * (values / values[0] - 1.0),
            yerr=100.0 / np.sqrt(np.maximum(values * sound, 1.0)),
            color=colour, marker=marker(t), linewidth=1.0,
            label=f"above {number(float(scan.thresholds_kev[t]))} keV",
        )  # fmt: skip
    axes.set_xlabel("exposure (index in the scan)")
    axes.set_ylabel("% from the first")
    axes.set_title("open exposures of the brightest setting")
    axes.locator_params(axis="x", integer=True)
    axes.legend(loc="upper left", bbox_to_anchor=(1.01, 1.0))
    panels.light_grid(axes)
    last = figures.mean[opens[-1], 0] / figures.mean[opens[0], 0] - 1.0
    return sheet.picture(
        alt=(
            f"{opens.size} open exposures; the last counts "
            f"{fixed(100 * float(last), 2, sign=True)} % against the first at the "
            "lowest threshold."
        ),
        caption=(
            "Bars: counting error of the mean over all pixels. All thresholds moving "
            "together is the tube; one moving away from the others is a threshold."
        ),
    )


def dispersion_picture(scan: Scan, check: ScanCheck) -> Picture | None:
    """Variance over mean across repeats, against what counting leaves."""
    settings = sorted(check.dispersions, key=lambda d: -len(d.exposures))[
        :_MOST_SETTINGS
    ]
    if not settings:
        return None
    sheet = Sheet(
        2.7, columns=len(settings), width=min(11.0, 0.6 + 2.7 * max(2, len(settings)))
    )
    place = np.arange(scan.shape[1])
    for i, (axes, one) in enumerate(zip(sheet.axes, settings, strict=True)):
        axes.plot(place, one.expected, color=STANDBY, marker="_", markersize=14.0,
                  markeredgewidth=2.0, linestyle="none", label="expected")  # fmt: skip
        axes.errorbar(place, one.ratio, yerr=one.standard_error, color=INK, fmt="o",
                      capsize=2.5, label="measured")  # fmt: skip
        axes.set_xticks(place, [number(float(e), 2) for e in scan.thresholds_kev])
        axes.set_xlabel("threshold (keV)")
        axes.set_xlim(-0.6, place.size - 0.4)
        axes.set_title(
            f"{len(one.exposures)} exposures, {one.exposures[0]} to {one.exposures[-1]}"
        )
        panels.light_grid(axes)
        if i == 0:
            axes.set_ylabel("variance / mean")
    handles, names = sheet.axes[0].get_legend_handles_labels()
    sheet.figure.legend(handles, names, loc="outside right upper")
    off = [np.nan_to_num(np.abs(d.ratio - d.expected)).max() for d in settings]
    worst = float(max(off))
    return sheet.picture(
        alt=(
            "Variance over mean of repeated exposures at each threshold, largest "
            f"difference from the expected value {number(worst, 2)}."
        ),
        caption=(
            "1 is Poisson; dead time makes it smaller. Far below: the images were "
            "averaged or smoothed and are no counts. Far above: something besides "
            "counting changes from repeat to repeat."
        ),
    )


def images_picture(
    scan: Scan, figures: ScanFigures, check: ScanCheck
) -> Picture | None:
    """Open beam, dark counts and dead time of every pixel."""
    parts = [
        (figures.open_rate, "open beam", "counts per second"),
        (figures.dark_rate, "dark", "counts per second"),
        (
            None if check.loss is None else check.loss.dead_time_ns,
            "dead time of open exposures",
            "ns",
        ),
    ]
    found = [(i, t, u) for i, t, u in parts if i is not None]
    if not found:
        return None
    shape = scan.shape[2:]
    sheet = Sheet(map_height(shape, 3), columns=3)
    words = []
    single = ""
    if check.loss is not None:
        scatter = number(middle_half_width(check.loss.dead_time_ns), 2)
        single = (
            f" One pixel's dead time scatters by {scatter} ns here: only structure in "
            "its map means something."
        )
    for axes, (image, title, unit) in zip(sheet.axes, found, strict=False):
        panels.draw_map(
            axes,
            image,
            scale=amount_scale(),
            limits=panels.robust_limits(image),
            label=unit,
            title=title,
        )
        words.append(f"{title}: median {number(median(image))} {unit}")
    for axes in sheet.axes[len(found) :]:
        axes.set_visible(False)
    return sheet.picture(
        alt=f"Maps of the pixels. {listed(words)}.",
        caption=(
            f"Above the lowest threshold, {number(float(scan.thresholds_kev[0]))} keV."
            f"{single} {panels.LIMITS_NOTE}{panels.block_note(shape)}"
        ),
    )
