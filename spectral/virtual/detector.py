"""A virtual detector: its sensor, its electronics, and how its pixels differ."""

from __future__ import annotations

import math
import tomllib
from dataclasses import dataclass, fields
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

from spectral.errors import InputError

if TYPE_CHECKING:
    from collections.abc import Mapping

PULSE_SHAPES = ("rectangle", "exponential", "semi-gaussian")
# Time above half the peak, in units of width, decay time and peaking time: ln 2, and
# the distance of the two roots of s exp(1 - s) = 1/2.
_HALF_HEIGHT = {
    "rectangle": 1.0,
    "exponential": 0.6931471805599453,
    "semi-gaussian": 2.4463855281,
}
T = TypeVar("T")


@dataclass(frozen=True, slots=True, kw_only=True)
class VirtualSensor:
    """A slab of semiconductor, lit through the face away from its square pixels.

    Attributes
    ----------
    material : str
        Name or formula.
    density_g_cm3 : float
    thickness_um, pitch_um : float, in um
    bias_v : float, in V
        Across the whole thickness; the field is taken as uniform.
    pair_energy_ev, fano : float
        Energy per electron-hole pair in eV, and the Fano factor.
    relative_permittivity : float
    temperature_k : float, in K
    track_share : float
        Standard deviation of a fresh cloud as a share of the electron's range.
    fresh_cloud_um : float, in um
        Added to it in quadrature.
    mobility_lifetime_cm2_per_v : float
        Of the carriers that are collected, in cm2/V; infinite where none is trapped.
    gap_um, gap_loss : float
        Width of the gap between pixels, and the share of the charge lost in it.
    """

    material: str
    density_g_cm3: float
    thickness_um: float
    pitch_um: float
    bias_v: float
    pair_energy_ev: float
    fano: float
    relative_permittivity: float
    temperature_k: float = 300.0
    track_share: float = 0.35
    fresh_cloud_um: float = 1.0
    mobility_lifetime_cm2_per_v: float = float("inf")
    gap_um: float = 0.0
    gap_loss: float = 0.0

    def __post_init__(self) -> None:
        """Refuse what cannot be."""
        for name in (
            "density_g_cm3",
            "thickness_um",
            "pitch_um",
            "bias_v",
            "pair_energy_ev",
            "relative_permittivity",
            "temperature_k",
            "fresh_cloud_um",
            "mobility_lifetime_cm2_per_v",
        ):
            if not getattr(self, name) > 0.0:
                msg = f"sensor {name} must be positive, got {getattr(self, name)!r}"
                raise InputError(msg)
        if not 0.0 <= self.gap_loss <= 1.0 or not 0.0 <= self.gap_um < self.pitch_um:
            msg = (
                "sensor gap_loss must lie in [0, 1] and gap_um below pitch_um, got "
                f"{self.gap_loss!r} and {self.gap_um!r}"
            )
            raise InputError(msg)


@dataclass(frozen=True, slots=True, kw_only=True)
class PixelSpread:
    """Standard deviations from pixel to pixel; shares unless a unit is named.

    Attributes
    ----------
    threshold_kev : float, in keV
        Of each threshold, independently.
    threshold_common_kev : float, in keV
        Of all thresholds of a pixel together.
    gain, noise, area, dead_time : float
    """

    threshold_kev: float = 0.0
    threshold_common_kev: float = 0.0
    gain: float = 0.0
    noise: float = 0.0
    area: float = 0.0
    dead_time: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class BadPixelShares:
    """Shares of pixels that are not as they should be, by kind.

    Attributes
    ----------
    dead, stuck, noisy, unstable : float
        No counts; always the same count; many times the noise; thresholds that jump
        from one exposure to the next.
    broken_columns : int
        Columns that count nothing from some row on.
    """

    dead: float = 0.0
    stuck: float = 0.0
    noisy: float = 0.0
    unstable: float = 0.0
    broken_columns: int = 0


@dataclass(frozen=True, slots=True, kw_only=True)
class VirtualDetector:
    """All that makes a virtual detector, but for the seed.

    Attributes
    ----------
    name, note : str
    sensor : VirtualSensor
    thresholds_kev : tuple of float, in keV
        A usual setting, for those who have none yet.
    noise_kev : float, in keV
        Standard deviation of the electronic noise on a pulse.
    dead_time_ns : float, in ns
        How long a pulse stays above half its peak.
    pulse_shape : {"rectangle", "exponential", "semi-gaussian"}
    counter_bits : int
        The counter stops at its largest value.
    spread : PixelSpread
    bad_pixels : BadPixelShares
    """

    name: str
    sensor: VirtualSensor
    thresholds_kev: tuple[float, ...]
    noise_kev: float
    dead_time_ns: float
    pulse_shape: str = "semi-gaussian"
    counter_bits: int = 32
    spread: PixelSpread = PixelSpread()
    bad_pixels: BadPixelShares = BadPixelShares()
    note: str = ""

    def __post_init__(self) -> None:
        """Refuse what cannot be."""
        if self.pulse_shape not in PULSE_SHAPES:
            msg = (
                f"pulse_shape {self.pulse_shape!r} is unknown: use one of "
                f"{', '.join(PULSE_SHAPES)}"
            )
            raise InputError(msg)
        if (
            not 0.0 <= self.noise_kev < math.inf
            or not 0.0 < self.dead_time_ns < math.inf
        ):
            msg = (
                "noise_kev must not be negative and dead_time_ns must be positive, got "
                f"{self.noise_kev!r} and {self.dead_time_ns!r}"
            )
            raise InputError(msg)
        if not 1 <= self.counter_bits <= 32:
            msg = f"counter_bits must lie in 1 to 32, got {self.counter_bits!r}"
            raise InputError(msg)

    @property
    def pulse_time_ns(self) -> float:
        """Width, decay time or peaking time of the pulse, in ns."""
        return self.dead_time_ns / _HALF_HEIGHT[self.pulse_shape]

    @property
    def count_limit(self) -> int:
        """Largest count the counter holds."""
        return int(2**self.counter_bits) - 1


def read_detector(path: str | Path) -> VirtualDetector:
    """Detector described by a TOML text.

    Parameters
    ----------
    path : str or Path

    Returns
    -------
    VirtualDetector

    Raises
    ------
    InputError
        If a table or field is missing, unknown, or cannot be.
    """
    path = Path(path)
    try:
        text = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, tomllib.TOMLDecodeError) as error:
        msg = f"{path.name}: not a detector description: {error}"
        raise InputError(msg) from error
    known = {"name", "note", "sensor", "electronics", "spread", "bad_pixels"}
    missing = {"name", "sensor", "electronics"} - text.keys()
    if missing or text.keys() - known:
        what = f"lacks {sorted(missing)}" if missing else "has unknown entries "
        msg = f"{path.name}: the description {what}{sorted(text.keys() - known) or ''}"
        raise InputError(msg)
    electronics = dict(text["electronics"])
    if "thresholds_kev" in electronics:
        electronics["thresholds_kev"] = tuple(map(float, electronics["thresholds_kev"]))
    whole = {
        "name": text["name"],
        "note": text.get("note", ""),
        "sensor": _build(VirtualSensor, text["sensor"], f"{path.name} [sensor]"),
        "spread": _build(PixelSpread, text.get("spread", {}), f"{path.name} [spread]"),
        "bad_pixels": _build(
            BadPixelShares, text.get("bad_pixels", {}), f"{path.name} [bad_pixels]"
        ),
    }
    return _build(VirtualDetector, electronics | whole, f"{path.name} [electronics]")


def _build(kind: type[T], table: Mapping[str, Any], where: str) -> T:
    """Dataclass from a table, with errors that name the field."""
    names = {f.name for f in fields(kind)}  # type: ignore[arg-type]
    unknown = sorted(table.keys() - names)
    if unknown:
        msg = f"{where}: field {unknown[0]!r} is unknown: known are {sorted(names)}"
        raise InputError(msg)
    try:
        return kind(**table)
    except TypeError as error:
        msg = f"{where}: {error}"
        raise InputError(msg) from error
