"""What lies around an edge: problems on it, near it and outside of it, for every shape of edge."""

from __future__ import annotations

import numpy as np

from tests.corpus import edges, pieces, points
from tests.corpus.edges import Edge
from tests.corpus.problem import Draft

SHAPES = {
    "curved": edges.curved,
    "flat": edges.flat,
    "narrow": edges.narrow,
    "nonexposed": edges.nonexposed,
    "threefold": edges.threefold,
    "tomography": edges.tomography,
    "ball": edges.ball,
    "cone": edges.cone,
    "stabiliser": edges.stabiliser,
    "ferromagnet": edges.ferromagnet,
    "blocks": edges.blocks,
    "prior": edges.with_prior,
    "face": points.face,
    "vertex": points.vertex,
    "moments": points.moments,
    "ising": points.ising,
    "commuting": points.commuting,
    "weighted": points.weighted,
    "dropped": points.dropped,
}


def any_edge(rng, index: int) -> Edge:
    """An edge of any shape, turning with the index."""
    shapes = list(SHAPES.values())
    return shapes[index % len(shapes)](rng, index)


def at(place: str, shape):
    """Problems at a place ("boundary", "near", "outside") of the edges that `shape` makes."""
    return lambda rng, index: placed(place, shape(rng, index), index)


def tangent(rng, index: int) -> Draft:
    """Outside along a tangent of a ball or cone: the exposing direction of the edge point shows no margin
    at all.

    From the touching point of a sphere of radius R a step s along the tangent (for the cone: away from the
    apex) is sqrt(R^2 + s^2) - R away from the reachable set.
    """
    length = 10.0 ** -(1 + index % 5)
    edge = (edges.ball, edges.cone)[index // 5 % 2](rng, index)
    if index // 5 % 2:
        # the apex state is the one that shares the tangent plane: its value is the other end of the segment
        h = np.tensordot(edge.normal, edge.charges, axes=1) - edge.normal @ edge.point * np.eye(edge.charges.shape[1])
        _, u = np.linalg.eigh(h)
        ground = u[:, : 2 * edge.face_dimension]
        mixed = pieces.values_in(edge.charges, ground @ ground.conj().T / ground.shape[1])
        along = edge.point - mixed
        radius = 1.0
    else:
        along = edges.unit(rng, len(edge.point))
        along = along - (along @ edge.normal) * edge.normal
        radius = (0.5, 1, 1.5, 2)[index % 4]
    along = along / np.linalg.norm(along)
    distance = float(np.hypot(radius, length) - radius)
    draft = edge.outside(length)
    note = f"{edge.note}, tangent by {length:.0e}, outside by {distance:.1e}"
    return draft.change(targets=edge.point + length * along, displacement=length * along, distance=distance, note=note)


MOVED = ("flat", "face", "curved", "vertex", "nonexposed", "blocks")


def placed(place: str, edge: Edge, index: int, *, smallest: int = 10) -> Draft:
    """The edge point itself, or inside or outside of it by steps down to 10^-smallest."""
    if place == "boundary":
        return edge.boundary()
    if place == "near":
        return edge.inside(10.0 ** -(2 + index % (smallest - 1)))
    return edge.outside(10.0 ** -(1 + index % smallest))


def scaled(place: str):
    """Asked in units from 1e-8 to 1e8."""

    def make(rng, index: int) -> Draft:
        shape = MOVED[index % len(MOVED)]
        base = placed(place, SHAPES[shape](rng, index), index)
        factors = 10 ** rng.uniform(-8, 8, len(base.charges))
        return base.transformed(np.diag(factors), note=f"{shape}, units 1e+-8")

    return make


def mixed(place: str):
    """Charges mixed by a matrix of condition 10..1e4; steps down to 1e-7, far above rounding times condition."""

    def make(rng, index: int) -> Draft:
        shape = MOVED[index % len(MOVED)]
        base = placed(place, SHAPES[shape](rng, index), index, smallest=7)
        m = len(base.charges)
        condition = 10.0 ** (1 + index % 4)
        singular = np.logspace(0, -np.log10(condition), m)
        matrix = (pieces.unitary(rng, m) * singular) @ pieces.unitary(rng, m)
        return base.transformed(matrix, note=f"{shape}, mixed 1:{condition:.0e}")

    return make
