"""Which exposures of a scan were taken at one setting."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from collections.abc import Collection, Sequence

    from numpy.typing import NDArray

    from spectral.scans.scan import Scan


def setting_numbers(
    scan: Scan, exposures: Sequence[int] | NDArray[np.int64]
) -> NDArray[np.int64]:
    """A number for each exposure, the same for exposures of one setting.

    A setting is a role, what stands in the beam, count time, current and angle.
    Dark exposures are of one setting whatever the current says.

    Parameters
    ----------
    scan : Scan
    exposures : sequence of int
    """
    known: dict[tuple[object, ...], int] = {}
    numbers = []
    for i in exposures:
        key = setting(scan, int(i))
        numbers.append(known.setdefault(key, len(known)))
    return np.array(numbers, np.int64)


def setting(scan: Scan, exposure: int) -> tuple[object, ...]:
    """What makes an exposure's setting, comparable with another's."""
    role = scan.role[exposure]
    current = None if scan.current_ma is None else float(scan.current_ma[exposure])
    angle = None
    if scan.rotation_angle_deg is not None and role == "object":
        angle = float(scan.rotation_angle_deg[exposure])
    return (
        role,
        tuple(np.nan_to_num(scan.thickness_mm[exposure], nan=-1.0).tolist()),
        float(scan.count_time_s[exposure]),
        None if role == "dark" else current,
        angle,
    )


def usable_exposures(
    scan: Scan, *roles: str, without: Collection[int]
) -> NDArray[np.int64]:
    """Exposures that have one of the roles, but for those left out, in order."""
    which = scan.exposures(*roles)
    out: NDArray[np.int64] = which[~np.isin(which, list(without))]
    return out


def settings_with_repeats(
    scan: Scan, *roles: str, fewest: int = 2, without: Collection[int] = ()
) -> list[NDArray[np.int64]]:
    """Exposures of each setting that was taken more than once, in order.

    Parameters
    ----------
    scan : Scan
    *roles : str
    fewest : int
        Repeats that make a setting worth returning.
    without : collection of int
        Exposures to leave out.
    """
    which = usable_exposures(scan, *roles, without=without)
    numbers = setting_numbers(scan, which)
    groups = [which[numbers == g] for g in np.unique(numbers)]
    return [group for group in groups if len(group) >= fewest]
