"""The two estimators keep scikit-learn's conventions."""

from __future__ import annotations

from sklearn.base import clone

from spectral.calibration.calibrator import WedgeCalibrator
from spectral.decomposition.decomposer import MaterialDecomposer


def test_calibrator_is_cloned_with_its_parameters() -> None:
    copy = clone(WedgeCalibrator(rounds=3, faults="refuse", excluded=(4,)))
    assert copy.get_params()["rounds"] == 3
    assert copy.get_params()["faults"] == "refuse"
    assert copy.get_params()["excluded"] == (4,)


def test_decomposer_is_cloned_with_its_parameters() -> None:
    made = MaterialDecomposer("a calibration", nonnegative=True)  # type: ignore[arg-type]
    copy = clone(made)
    assert copy.get_params() == made.get_params()
    assert copy.nonnegative
