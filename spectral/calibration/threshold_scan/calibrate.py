"""From threshold scans of known energies to keV for every pixel."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

import spectral
from spectral.calibration.threshold_scan.coarse_scale import coarse_scale
from spectral.calibration.threshold_scan.energy_scale import (
    PLACE_FLOOR_KEV,
    EnergyScale,
    fit_energy_scale,
)
from spectral.calibration.threshold_scan.flags import ThresholdFlag
from spectral.calibration.threshold_scan.landmark_places import (
    LandmarkPlaces,
    find_places,
)
from spectral.calibration.threshold_scan.landmark_shape import landmark_table
from spectral.calibration.threshold_scan.landmark_teaching import NOISE_START_KEV
from spectral.calibration.threshold_scan.landmarks import END, LINE, Landmark
from spectral.calibration.threshold_scan.oriented_scan import (
    OrientedScan,
    check_scans,
    good_pixels,
    orient,
)
from spectral.calibration.threshold_scan.result import ThresholdEnergies
from spectral.calibration.threshold_scan.source_photons import sensor_of
from spectral.errors import CalibrationError
from spectral.physics.cross_sections import table_source
from spectral.physics.sensor import ChargeTransport

if TYPE_CHECKING:
    from collections.abc import Callable, Sequence

    from numpy.typing import NDArray

    from spectral.calibration.threshold_scan.landmark_curve import CurveTable
    from spectral.physics.sensor import Sensor
    from spectral.scans.threshold_scan import ThresholdScan

VOLTAGE_ERROR = 0.005
"""Share by which a tube's voltage may differ from its nominal one (common practice, no
source)."""
NO_SENSOR_ERROR_KEV = 0.5
"""Common error of a landmark where no sensor is described: typical bias by sharing."""


def threshold_energies(
    scans: Sequence[ThresholdScan],
    *,
    charge: ChargeTransport | None = None,
    progress: Callable[[float], None] | None = None,
) -> ThresholdEnergies:
    """Energy scale of every pixel from threshold scans.

    Parameters
    ----------
    scans : sequence of ThresholdScan
        Of one detector in one state; two or more known energies in all.
    charge : ChargeTransport, optional
        Charge clouds to begin with; their size is learned from the lines.
    progress : callable, optional
        Called with the finished share.

    Raises
    ------
    InputError
        If the scans differ in pixels, comparators or sensor.
    CalibrationError
        If there are fewer than two known energies, or one cannot be found.

    Notes
    -----
    Pile-up is left out: scan at a rate at which it does not matter. A tube's end is
    taken at its nominal voltage; with CdTe under bias the threshold that just silences
    a pixel keeps rising with exposure (Sensors 16 (2016) 518), so lines are to be
    preferred, and all scans should follow one another closely.
    """
    check_scans(scans)
    oriented = [orient(scan) for scan in scans]
    landmarks = [o.landmark for o in oriented]
    if len({m.energy_kev for m in landmarks}) < 2:
        msg = (
            "two different known energies are needed for offset and gain, got "
            f"{', '.join(m.name for m in landmarks)}"
        )
        raise CalibrationError(msg)
    good = good_pixels(oriented)
    nominal = next((s.nominal_scale for s in scans if s.nominal_scale), None)
    means = [o.counts[good].mean(axis=0) for o in oriented]
    scale = coarse_scale([o.settings for o in oriented], means, landmarks, nominal)
    sensor = sensor_of(scans[0])
    found = _find_all(oriented, good, scale, sensor, charge, progress)
    return _result(oriented, found, scale, sensor, charge)


def _find_all(
    oriented: list[OrientedScan],
    good: NDArray[np.bool_],
    scale: tuple[float, float],
    sensor: Sensor | None,
    charge: ChargeTransport | None,
    progress: Callable[[float], None] | None,
) -> list[LandmarkPlaces]:
    """Places of all landmarks: lines first, which then say where the others lie."""
    order = sorted(range(len(oriented)), key=lambda j: oriented[j].landmark.order)
    found: dict[int, LandmarkPlaces] = {}
    offset, gain = scale
    for done, j in enumerate(order):
        each = oriented[j]
        mark = each.landmark
        lines = [i for i in found if oriented[i].landmark.order == LINE]
        expected, noise, cloud = None, NOISE_START_KEV, None
        if lines:
            noise = float(np.median([np.nanmedian(found[i].width_kev) for i in lines]))
            cloud = float(np.mean([found[i].cloud for i in lines]))
        if lines and mark.order != LINE:
            expected = _expected(
                mark, [(oriented[i].landmark, found[i]) for i in lines]
            )

        def build(
            cloud: float, mark: Landmark = mark, each: OrientedScan = each
        ) -> CurveTable:
            return landmark_table(
                mark,
                each.scan.source,
                sensor,
                ChargeTransport() if charge is None else charge,
                cloud=cloud,
            )

        found[j] = find_places(
            build,
            offset + gain * each.settings - mark.energy_kev,
            each.counts,
            good,
            expected_kev=expected,
            noise_kev=noise,
            cloud=cloud,
        )
        if progress is not None:
            progress((done + 1) / len(order))
    return [found[j] for j in range(len(oriented))]


def _expected(
    mark: Landmark, lines: list[tuple[Landmark, LandmarkPlaces]]
) -> NDArray[np.float64]:
    """Where the lines found place another landmark, in keV from the rough scale."""
    energy = np.array([line.energy_kev for line, _ in lines])
    shift = np.stack([np.nan_to_num(places.shift_kev) for _, places in lines])
    if np.unique(energy).size < 2:
        return np.asarray(shift.mean(axis=0))
    slope, level = np.polyfit(energy, shift, 1)
    return np.asarray(level + slope * mark.energy_kev)


LANDMARK_UNUSABLE = np.uint16(
    ThresholdFlag.MASKED
    | ThresholdFlag.NO_STEP
    | ThresholdFlag.OUT_OF_RANGE
    | ThresholdFlag.NOT_CONVERGED
    | ThresholdFlag.POOR_FIT
    | ThresholdFlag.ODD_WIDTH
)


def _result(
    oriented: list[OrientedScan],
    found: list[LandmarkPlaces],
    scale: tuple[float, float],
    sensor: Sensor | None,
    charge: ChargeTransport | None,
) -> ThresholdEnergies:
    """Energy scale through the places found, and the record."""
    offset, gain = scale
    pixels = oriented[0].scan.shape[1:]
    energy = np.array([o.landmark.energy_kev for o in oriented])
    shift = np.stack([f.shift_kev for f in found])
    place = (energy[:, None] + shift - offset) / gain
    error = np.stack([np.hypot(f.error_kev, PLACE_FLOOR_KEV) for f in found]) / abs(
        gain
    )
    flags = np.stack([f.flags for f in found])
    usable = (flags & LANDMARK_UNUSABLE) == 0
    common = np.array([f.common_error_kev for f in found])
    if sensor is None:
        common = np.hypot(common, NO_SENSOR_ERROR_KEV)
    ends = np.array([o.landmark.order == END for o in oriented])
    common = np.where(ends, np.hypot(common, VOLTAGE_ERROR * energy), common)
    straight = fit_energy_scale(energy, place, error, usable, common)

    def image(values: NDArray[np.float64]) -> NDArray[np.float64]:
        return values.reshape(*values.shape[:-1], *pixels)

    settings = np.concatenate([o.settings for o in oriented])
    return ThresholdEnergies(
        offset_kev=image(straight.offset_kev),
        gain_kev=image(straight.gain_kev),
        covariance=image(straight.covariance.T),
        common_covariance=straight.common_covariance,
        chi_square=image(straight.chi_square),
        freedom=straight.freedom.reshape(pixels),
        flags=_pixel_flags(flags, usable, straight).reshape(pixels),
        noise_kev=image(_noise(oriented, found, usable)),
        landmarks=tuple(o.landmark.name for o in oriented),
        landmark_kev=energy,
        place=image(place),
        place_error=image(error),
        landmark_flags=flags.reshape(-1, *pixels),
        residual_kev=straight.residual_kev,
        common_error_kev=common,
        cloud=np.array([f.cloud for f in found]),
        scanned=(float(settings.min()), float(settings.max())),
        assumptions=_assumptions(
            oriented, sensor, 0.0 if charge is None else charge.trapping
        ),
        process={
            "program": "wedgewright",
            "version": spectral.__version__,
            "cross sections": table_source(),
            "scans": " ".join(o.scan.digest or o.scan.file for o in oriented),
        },
    )


def _pixel_flags(
    landmark_flags: NDArray[np.uint16],
    usable: NDArray[np.bool_],
    straight: EnergyScale,
) -> NDArray[np.uint16]:
    """Flags of the pixels from those of their landmarks and their scale."""
    flags = straight.flags.copy()
    masked = (landmark_flags & ThresholdFlag.MASKED).any(axis=0)
    lost = ~usable.all(axis=0) & ~masked
    flags |= np.where(lost, ThresholdFlag.LANDMARK_LOST, 0).astype(np.uint16)
    flags |= np.where(masked, ThresholdFlag.MASKED, 0).astype(np.uint16)
    return flags


def _noise(
    oriented: list[OrientedScan],
    found: list[LandmarkPlaces],
    usable: NDArray[np.bool_],
) -> NDArray[np.float64]:
    """Mean width of each pixel's usable lines, in keV."""
    lines = [j for j, o in enumerate(oriented) if o.landmark.order == LINE]
    if not lines:
        return np.full(usable.shape[1], np.nan)
    width = np.stack([found[j].width_kev for j in lines])
    many = usable[lines].sum(axis=0)
    total = np.where(usable[lines], width, 0.0).sum(axis=0)
    return np.where(many > 0, total / np.maximum(many, 1), np.nan)


def _assumptions(
    oriented: list[OrientedScan], sensor: Sensor | None, trapping: float
) -> tuple[str, ...]:
    """What was taken for granted."""
    said = ["counts are taken as free of pile-up"]
    if sensor is not None and trapping == 0.0:
        said.append(
            "no charge is trapped: keV are those of charge from the depth at which "
            "the lines are absorbed"
        )
    if sensor is None:
        said.append(
            "the sensor is not described: charge sharing is not modelled, and "
            f"{NO_SENSOR_ERROR_KEV:g} keV is added to the common error"
        )
    if any(o.scan.source.kind == "tube end" for o in oriented):
        said.append(
            "a tube's end lies at its nominal voltage; the threshold that just "
            "silences a pixel may keep rising with exposure"
        )
    return tuple(said)
