"""Tables behind the tungsten tube model: cross section and electron depths."""

from __future__ import annotations

import numpy as np

# Scaled bremsstrahlung cross section of tungsten, (beta^2 / Z^2) k dsigma/dk in mb.
# Rows: electron energies in keV; columns: photon energy over electron energy.
# Source: S. M. Seltzer, M. J. Berger, At. Data Nucl. Data Tables 35 (1986) 345-418,
# Z = 74, total of nuclear and electron part; the digits as distributed with the
# package spekpy 2.5.
BREMSSTRAHLUNG_KEV = np.array(
    [10.0, 15.0, 20.0, 30.0, 40.0, 50.0, 60.0, 80.0, 100.0, 150.0, 200.0]
)
BREMSSTRAHLUNG_FRACTION = np.array(
    [0.0, 0.05, 0.1, 0.15, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0]
)
# fmt: off
BREMSSTRAHLUNG_MB = np.array([
    [3.620, 3.717, 3.807, 3.892, 3.972, 4.108, 4.208,
     4.269, 4.304, 4.341, 4.393, 4.476, 4.550],
    [4.480, 4.603, 4.702, 4.780, 4.837, 4.891, 4.898,
     4.893, 4.889, 4.902, 4.930, 4.979, 5.051],
    [5.137, 5.250, 5.333, 5.388, 5.418, 5.408, 5.352,
     5.296, 5.251, 5.229, 5.232, 5.262, 5.311],
    [6.079, 6.161, 6.202, 6.211, 6.187, 6.064, 5.903,
     5.767, 5.665, 5.600, 5.557, 5.532, 5.532],
    [6.779, 6.796, 6.781, 6.740, 6.675, 6.486, 6.258,
     6.039, 5.871, 5.793, 5.713, 5.636, 5.591],
    [7.468, 7.345, 7.214, 7.086, 6.960, 6.716, 6.482,
     6.262, 6.063, 5.890, 5.754, 5.662, 5.590],
    [7.905, 7.744, 7.577, 7.413, 7.254, 6.946, 6.655,
     6.386, 6.144, 5.939, 5.781, 5.669, 5.562],
    [8.582, 8.355, 8.124, 7.900, 7.682, 7.267, 6.881,
     6.530, 6.219, 5.959, 5.762, 5.615, 5.454],
    [8.924, 8.816, 8.594, 8.305, 7.994, 7.433, 6.963,
     6.574, 6.243, 5.958, 5.715, 5.503, 5.307],
    [9.816, 9.521, 9.147, 8.738, 8.329, 7.606, 7.023,
     6.546, 6.118, 5.747, 5.424, 5.145, 4.883],
    [10.445, 9.890, 9.364, 8.877, 8.426, 7.624, 6.946,
     6.381, 5.901, 5.481, 5.117, 4.774, 4.471],
])

# Electrons in thick tungsten, normal incidence, against u = energy over start energy.
# Mean of 30, 60, 100 and 150 keV (15 000 electrons each): in these units the four
# differ by 2 to 4 % only. The walk: single elastic collisions after the screened
# Rutherford formula, continuous slowing down after Bethe's formula
# (tests/reference/test_electron_depths.py walks it again).
# Source: the formulas of D. C. Joy, Monte Carlo Modeling for Electron Microscopy and
# Microanalysis, Oxford (1995), ch. 3, from memory; the digits are our own run.
ELECTRON_U = np.array([
    0.125, 0.175, 0.225, 0.275, 0.325, 0.375, 0.425, 0.475, 0.525, 0.575,
    0.625, 0.675, 0.725, 0.775, 0.825, 0.875, 0.925, 0.975, 1.0,
])
# Path walked per electron while at u, over the unlimited path: 1 less what left.
ELECTRON_REMAINING = np.array([
    0.4965, 0.4976, 0.4996, 0.5021, 0.5062, 0.5115, 0.5187, 0.5277, 0.5400, 0.5554,
    0.5752, 0.6008, 0.6327, 0.6748, 0.7319, 0.8055, 0.8984, 0.9786, 1.0,
])
# Mean depth at u, over the path length from start to 5 keV.
ELECTRON_DEPTH = np.array([
    0.1717, 0.1713, 0.1706, 0.1697, 0.1682, 0.1664, 0.1639, 0.1607, 0.1566, 0.1518,
    0.1461, 0.1390, 0.1302, 0.1192, 0.1055, 0.0890, 0.0667, 0.0300, 0.0,
])
# Mean squared over variance of the depth: the shape parameter of a gamma law.
ELECTRON_SHAPE = np.array([
    3.383, 3.373, 3.356, 3.338, 3.310, 3.291, 3.275, 3.254, 3.216, 3.208,
    3.211, 3.220, 3.262, 3.325, 3.479, 3.948, 5.026, 2.804, 2.804,
])
# Mean of the Legendre polynomials P1 and P2 of the direction cosine to the beam.
ELECTRON_P1 = np.array([
    0.0, 0.0, 0.001, 0.002, 0.002, 0.004, 0.005, 0.008, 0.008, 0.009,
    0.012, 0.020, 0.035, 0.051, 0.075, 0.124, 0.248, 0.620, 1.0,
])
ELECTRON_P2 = np.array([
    0.0, 0.0, 0.0, 0.0, 0.0, -0.001, -0.001, -0.002, -0.003, -0.003,
    -0.004, -0.005, -0.006, -0.007, -0.010, -0.012, 0.011, 0.336, 1.0,
])
# fmt: on
