"""The kernel K_c between charges and vertical currents in a layered stack, split like Ewald's.

A ray of K_c has the spectrum ``a exp(-g D) / (2 g^2)``, ``g^2 = k_t^2 - kappa k^2``: the integral of
``exp(-g s) / (2 g)`` over s from D upwards, a line of images reaching from the image of the source to infinity. With
Ewald's integral for ``1/(4 pi R)`` it becomes

    (a / 4 pi) int (dt / t) erfc(t D) exp(-rho^2 t^2 + kappa k^2 / 4 t^2)          in space,
    (a / 4)    int (dt / t^3) erfc(t D) exp(-(k_t^2 - kappa k^2) / 4 t^2)          in the plane of k_t,

derived anew from P. P. Ewald, Ann. Phys. 369, 253, 1921. The share from the splitting parameter E upwards is the near
part's; nodes t finer than the mesh can tell are dropped there. The kernel is as mild as a logarithm, and the cloud's
own quadrature is enough. The plane of k_t: `shares`.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial

import numpy as np
from numpy.typing import NDArray
from scipy import sparse
from scipy.special import erfc

from . import quadrature
from .cloud import Cloud
from .ewald import Split
from .rays import CrossRay, real_if_real

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

FINEST = 20.0  # the near share ends at this over the shortest element: finer than the distances in the cloud
NODES = 10  # Gauss nodes for every factor e^2 of t


@dataclass(frozen=True)
class CrossNodes:
    """Nodes t (n,), 1/m, and weights dt/t of the near share in space."""

    t: Floats
    weights: Floats

    def vertical(self, distance: NDArray, powers: int) -> Floats:
        """What depends on the vertical distance, (powers, *shape, n).

        To be multiplied by ``exp(-rho^2 t^2)`` and summed over the nodes: the factors of ``(kappa k^2)^p``, m^(2p).
        """
        t = self.t
        bell = erfc(distance[..., None] * t) * (self.weights / (4 * np.pi))
        return np.stack([bell / (factorial(p) * (4 * t * t) ** p) for p in range(powers)])


def cross_nodes(split: Split, shortest: float) -> CrossNodes:
    """Nodes from E to what a mesh of that shortest element (m) can tell: Gauss on pieces of at most 2 in ln t."""
    low, high = np.log(split.splitting), np.log(max(FINEST / shortest, 20 * split.splitting))
    x, w = quadrature.gauss(NODES)
    edges = np.linspace(low, high, int(np.ceil((high - low) / 2)) + 1)
    width = np.diff(edges)[:, None]
    return CrossNodes(np.exp(edges[:-1, None] + width * x).ravel(), (width * w).ravel())


class CrossNear:
    """Near part of the K_c terms of one cell, ``<d, K_c J_z> + <J_z, K_c^T d>``, to be added to the currents'.

    Points of one height and points above each other are handled together: the kernel is a sum over nodes t of what
    depends on their heights (all rays at once) times ``exp(-rho^2 t^2)``.
    """

    def __init__(self, cloud: Cloud, zone: Ints, split: Split, nodes: CrossNodes, rays: list[CrossRay]):
        self.split, self.nodes, self.n = split, nodes, cloud.n
        self.kind = np.result_type(*(real_if_real(np.array([ray.amplitude, ray.kappa])) for ray in rays))
        self.charge, self.vertical = (sparse.csr_matrix(m.T) for m in (cloud.charge, cloud.current[2]))
        self.points = cloud.points
        upright = np.flatnonzero(np.diff(cloud.current[2].indptr))
        grain = 1e-9 * max(float(np.ptp(cloud.points, axis=0).max()), 1e-30)
        self.groups = []
        for pair in dict.fromkeys(ray.pair for ray in rays):
            of_pair = [ray for ray in rays if ray.pair == pair]
            sources = upright[zone[upright] == pair[1]]
            columns = _groups(np.round(self.points[sources, :2] / grain))
            observers = np.flatnonzero(zone == pair[0])
            for level in _groups(np.round(self.points[observers, 2:] / grain)):
                mine = observers[level]
                profile = self._profile(float(self.points[mine[0], 2]), self.points[sources, 2], of_pair)
                self.groups.append((mine, [(sources[c], profile[:, c]) for c in columns]))

    def _profile(self, z: float, sources: Floats, rays: list[CrossRay]) -> NDArray:
        """What depends on the heights, summed over rays, (powers, n_source, near nodes)."""
        powers = self.split.powers
        total = np.zeros((powers, len(sources), len(self.nodes.t)), self.kind)
        for ray in rays:
            weight = real_if_real(ray.amplitude * ray.kappa ** np.arange(powers))
            total += weight[:, None, None] * self.nodes.vertical(np.abs(z - ray.height(sources)), powers)
        return total

    def sums(self, shift: Floats) -> NDArray:
        """(powers, n, n) with the sources displaced by a lattice vector (3,)."""
        forward = self._one_way(shift)
        if not shift.any():
            return forward + forward.transpose(0, 2, 1)
        return forward + self._one_way(-shift).transpose(0, 2, 1)

    def _one_way(self, shift: Floats) -> NDArray:
        """Charges at home, vertical currents displaced."""
        total = np.zeros((self.split.powers, self.n, self.n), self.kind)
        t2 = self.nodes.t**2
        for observers, columns in self.groups:
            charge = self.charge[:, observers]
            rows = np.flatnonzero(np.diff(charge.indptr))
            for sources, profile in columns:
                away = self.points[observers, :2] - self.points[sources[0], :2] - shift[:2]
                square = (away**2).sum(axis=1)
                if square.min() > self.split.near_radius**2:
                    continue
                kernel = np.exp(-square[:, None] * t2) @ profile.transpose(0, 2, 1)  # (powers, observers, sources)
                vertical = self.vertical[:, sources]
                into = np.flatnonzero(np.diff(vertical.indptr))
                for p, matrix in enumerate(kernel):
                    total[p][np.ix_(rows, into)] += charge[rows] @ (vertical[into] @ matrix.T).T
        return total


def _groups(keys: Floats) -> list[Ints]:
    """Indices of equal rows of (n, m)."""
    _, inverse = np.unique(keys, axis=0, return_inverse=True)
    order = np.argsort(inverse.ravel(), kind="stable")
    return np.split(order, np.flatnonzero(np.diff(inverse.ravel()[order])) + 1) if len(order) else []
