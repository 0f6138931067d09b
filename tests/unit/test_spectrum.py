"""Energy bins, filters, spectra from tables."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

from spectral.errors import FileFormatError, InputError
from spectral.physics.materials import find_material
from spectral.physics.spectrum import (
    energy_bins,
    filtered,
    k_edges_kev,
    mean_energy,
    read_spectrum,
    rebinned,
)

if TYPE_CHECKING:
    from pathlib import Path


def test_borders_stand_on_edges() -> None:
    bins = energy_bins(10, 120, 1, edges_kev=[33.169, 26.711, 31.814, 200.0])
    for edge in (33.169, 26.711, 31.814):
        assert edge in bins.borders_kev
    assert bins.borders_kev[0] == 10
    assert bins.borders_kev[-1] == 120
    assert bins.widths_kev.min() >= 0.25
    assert bins.widths_kev.max() <= 1.5
    assert bins.centres_kev.size == bins.borders_kev.size - 1


def test_empty_ranges_are_refused() -> None:
    with pytest.raises(InputError, match="energy range 20 to 20 keV is empty"):
        energy_bins(20, 20, 1)
    with pytest.raises(InputError, match="bin width 0 keV must be positive"):
        energy_bins(20, 30, 0)


def test_k_edges_of_materials() -> None:
    edges = k_edges_kev([find_material("CdTe"), find_material("water")])
    assert edges == pytest.approx([26.711, 31.814], abs=0.002)


def test_filters_multiply() -> None:
    al, cu = find_material("Al"), find_material("Cu")
    energy = np.array([30.0, 60.0])
    both = filtered([2.0, 2.0], energy, [(al, 1.0), (cu, 0.1)])
    # exp(-(1.128 * 0.2699 + 10.91 * 0.0896)), exp(-(0.2778 * 0.2699 + 1.593 * 0.0896))
    np.testing.assert_allclose(both, 2 * np.exp([-1.28198, -0.21771]), rtol=1e-3)
    spectrum = np.array([1.0, 1.0])
    filtered(spectrum, energy, [(al, 1.0)])
    np.testing.assert_array_equal(spectrum, 1.0)


def test_impossible_filters_are_refused() -> None:
    al = find_material("Al")
    with pytest.raises(InputError, match="'aluminium' has thickness -1 mm"):
        filtered([1.0], [60.0], [(al, -1)])
    with pytest.raises(InputError, match="the last axes must agree"):
        filtered([1.0, 1.0], [60.0], [(al, 1)])


def test_mean_energy() -> None:
    assert mean_energy([1.0, 3.0], [20.0, 40.0]) == pytest.approx(35.0)


def test_rebinned_is_the_exact_integral() -> None:
    # Triangle 0 at 10, 4 at 20, 0 at 30 keV: area 40; 10 to 15 keV holds 5.
    bins = rebinned([10, 20, 30], [0, 4, 0], [0, 10, 15, 20, 22, 50])
    # 20 to 22 keV: 2 * (4 + 3.2) / 2
    np.testing.assert_allclose(bins, [0, 5, 15, 7.2, 12.8])


def test_tables_that_are_no_spectrum_are_refused() -> None:
    with pytest.raises(InputError, match="two columns of equal length"):
        rebinned([10, 20], [1], [10, 20])
    with pytest.raises(InputError, match="energies of a tabulated spectrum must rise"):
        rebinned([20, 10], [1, 1], [10, 20])
    with pytest.raises(InputError, match="must not be negative, nor all zero"):
        rebinned([10, 20], [1, -1], [10, 20])


@pytest.mark.parametrize(
    "text",
    [
        "10,0\n20,4\n30,0\n",
        "# a comment\nenergy;photons\n10;0\n20;4\n\n30;0\n",
        "10 0\n20 4\n30\t0\n",
    ],
)
def test_spectrum_files(tmp_path: Path, text: str) -> None:
    path = tmp_path / "tube.csv"
    path.write_text(text)
    np.testing.assert_allclose(read_spectrum(path, [10, 15, 30]), [5, 35])


def test_faulty_spectrum_files_are_named(tmp_path: Path) -> None:
    path = tmp_path / "tube.csv"
    path.write_text("energy,photons\n10,1\n20,x\n")
    with pytest.raises(
        FileFormatError, match=r"tube\.csv, line 3: wanted energy in keV"
    ):
        read_spectrum(path, [10, 20])
    path.write_text("energy,photons\n")
    with pytest.raises(FileFormatError, match=r"tube\.csv: a tabulated spectrum needs"):
        read_spectrum(path, [10, 20])
