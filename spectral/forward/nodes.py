"""Few exponentials in place of many energies: reduced energy nodes."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations_with_replacement
from typing import TYPE_CHECKING

import numpy as np

from spectral.errors import InputError

if TYPE_CHECKING:
    from numpy.typing import NDArray

RIDGE = 1e-6


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class NodeBasis:
    """Nodes for one domain, and the linear map from curves to node weights.

    Attributes
    ----------
    attenuation : array, shape (node, material), in cm2/g
    points : array, shape (point, material), in g/cm2
        Areal densities at which a curve must be given.
    projection : array, shape (node, point)
        Weights of the nodes = projection @ values of the curve at the points.
    """

    attenuation: NDArray[np.float64]
    points: NDArray[np.float64]
    projection: NDArray[np.float64]

    def weights(self, values: NDArray[np.float64]) -> NDArray[np.float64]:
        """Node weights, shape (node, ...), of curves given as (point, ...)."""
        if values.shape[0] != self.points.shape[0]:
            msg = (
                f"the curve has {values.shape[0]} values, the basis needs "
                f"{self.points.shape[0]}"
            )
            raise InputError(msg)
        return np.tensordot(self.projection, values, axes=1)

    def expected(
        self, weight: NDArray[np.float64], areal_density: NDArray[np.float64]
    ) -> NDArray[np.float64]:
        """Curve of node weights (node, ...) at areal densities (case, material)."""
        passed = np.exp(-areal_density @ self.attenuation.T)
        return np.tensordot(passed, weight, axes=1)


def domain_points(
    largest: NDArray[np.float64], *, per_axis: int | None = None, margin: float = 0.2
) -> NDArray[np.float64]:
    """Areal densities that cover a domain and a margin around it.

    Parameters
    ----------
    largest : array, shape (material,), in g/cm2
        Thickest stack of each material.
    per_axis : int, optional
        Points along each axis; 14 for two materials, 8 for three by default.
    margin : float
        The points reach from -margin/4 to 1 + margin of the largest.

    Returns
    -------
    array, shape (point, material), in g/cm2
        Chebyshev-spaced along each axis: polynomials and sums of exponentials are
        then pinned equally well everywhere.
    """
    if np.any(largest <= 0.0):
        msg = f"every material needs a positive largest areal density, got {largest}"
        raise InputError(msg)
    if per_axis is None:
        per_axis = {1: 40, 2: 14}.get(largest.size, 8)
    angle = np.pi * (np.arange(per_axis) + 0.5) / per_axis
    unit = 0.5 * (1.0 - np.cos(angle))
    low = -0.25 * margin
    axis = low + (1.0 + margin - low) * unit
    mesh = np.meshgrid(*[axis * top for top in largest], indexing="ij")
    return np.stack([m.ravel() for m in mesh], axis=1)


def choose_nodes(
    candidates: NDArray[np.float64],
    points: NDArray[np.float64],
    targets: NDArray[np.float64],
    *,
    count: int = 16,
    ridge: float = RIDGE,
) -> NodeBasis:
    """Nodes chosen by matching pursuit and exchange, with the map onto them.

    Parameters
    ----------
    candidates : array, shape (candidate, material), in cm2/g
        Attenuation at single energies and, where pulses add up, sums of two.
    points : array, shape (point, material), in g/cm2
    targets : array, shape (point, curve)
        Curves that the nodes must follow; all positive.
    count : int
        Number of nodes.
    ridge : float
        What a weight costs beside an error, both relative: nodes and weights are
        chosen so that the weights do not grow large with alternating signs.

    Returns
    -------
    NodeBasis

    Raises
    ------
    InputError
        If a target is not positive.

    Notes
    -----
    Rows are divided by the middle target, so that errors are relative.
    Source: orthogonal matching pursuit, Y. C. Pati, R. Rezaiifar, P. S.
    Krishnaprasad, Asilomar Conf. Signals Syst. Comput. 27 (1993) 40 (from memory);
    exchange as in V. V. Fedorov, Theory of Optimal Experiments (1972); the cost of
    weights, A. N. Tikhonov, Sov. Math. Dokl. 4 (1963) 1035 (from memory).
    """
    if not np.all(targets > 0.0):
        msg = "choose_nodes needs positive targets; a curve is zero or negative"
        raise InputError(msg)
    scale = np.exp(-np.mean(np.log(targets), axis=1))
    columns = np.exp(-points @ candidates.T) * scale[:, None]
    length = np.linalg.norm(columns, axis=0)
    columns /= length
    wanted = targets * scale[:, None]
    wanted /= np.linalg.norm(wanted, axis=0)
    cost = ridge * np.eye(candidates.shape[0])
    priced = np.concatenate([columns, cost])
    goal = np.concatenate([wanted, np.zeros((len(cost), wanted.shape[1]))])
    chosen = np.sort(_exchange(priced, goal, _pursue(priced, goal, count)))
    u, s, vt = np.linalg.svd(columns[:, chosen], full_matrices=False)
    projection = (vt.T * (s / (s**2 + ridge**2))) @ u.T * scale
    return NodeBasis(
        attenuation=candidates[chosen],
        points=points,
        projection=projection / length[chosen, None],
    )


def _pursue(
    columns: NDArray[np.float64], wanted: NDArray[np.float64], count: int
) -> list[int]:
    """Greedy choice: the column that takes most of what is left, again and again."""
    left = wanted.copy()
    free = columns.copy()
    chosen: list[int] = []
    for _ in range(min(count, columns.shape[1])):
        size = np.linalg.norm(free, axis=0)
        alive = size > 1e-9
        worth = np.linalg.norm(left, axis=0)
        gain = ((free.T @ (left / worth)) ** 2).sum(axis=1)
        best = int(np.argmax(np.where(alive, gain / np.maximum(size, 1e-9) ** 2, -1)))
        chosen.append(best)
        direction = free[:, best] / size[best]
        left -= np.outer(direction, direction @ left)
        free -= np.outer(direction, direction @ free)
    return chosen


def _exchange(
    columns: NDArray[np.float64],
    wanted: NDArray[np.float64],
    chosen: list[int],
    *,
    rounds: int = 3,
) -> list[int]:
    """Replace one chosen column at a time where another one leaves less."""
    best = np.inf
    for _ in range(rounds):
        before = best
        for place in range(len(chosen)):
            rest = chosen[:place] + chosen[place + 1 :]
            worst = _worst_with(columns, wanted, rest)
            worst[rest] = np.inf
            chosen = [*rest[:place], int(np.argmin(worst)), *rest[place:]]
            best = float(worst.min())
        if best > 0.7 * before:
            break
    return chosen


def _worst_with(
    columns: NDArray[np.float64], wanted: NDArray[np.float64], rest: list[int]
) -> NDArray[np.float64]:
    """Largest error left when each column joins the rest, shape (column,)."""
    basis, _ = np.linalg.qr(columns[:, rest])
    left = wanted - basis @ (basis.T @ wanted)
    free = columns - basis @ (basis.T @ columns)
    size = np.linalg.norm(free, axis=0)
    free /= np.maximum(size, 1e-9)
    share = free.T @ left
    worst = np.empty(columns.shape[1])
    for j in range(columns.shape[1]):
        worst[j] = np.abs(left - free[:, j, None] * share[j]).max()
    worst[size < 1e-9] = np.abs(left).max()
    return worst


def pair_candidates(
    attenuation: NDArray[np.float64],
    *,
    singles: int = 40,
    pairs: int = 12,
    triples: int = 6,
) -> NDArray[np.float64]:
    """Attenuations of single photons, and of two or three counted as one pulse.

    Parameters
    ----------
    attenuation : array, shape (material, energy), in cm2/g
    singles, pairs, triples : int
        How many energies to use alone, how many to pair, how many in threes.

    Returns
    -------
    array, shape (candidate, material), in cm2/g
    """

    def spread(count: int) -> NDArray[np.float64]:
        places = np.linspace(0, attenuation.shape[1] - 1, count).astype(int)
        return attenuation[:, np.unique(places)].T

    sums = [spread(singles)]
    for count, order in ((pairs, 2), (triples, 3)):
        few = spread(count)
        members = list(combinations_with_replacement(range(few.shape[0]), order))
        sums.append(few[np.array(members)].sum(axis=1))
    return np.concatenate(sums)
