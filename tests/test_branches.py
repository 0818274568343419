"""Field nodes are shared by all directions: where no knot is resonant, a direction between knots may be."""

from __future__ import annotations

import numpy as np
import pytest

from spinfit.branches import Request, between_knots, in_sight
from spinfit.hamiltonian import systems
from spinfit.lineshape import Shape
from spinfit.nodes import FieldNodes, node_accuracy
from spinfit.orientations import Rings
from spinfit.resonance import find
from spinfit.sheets import SMEAR_MOST, SMEAR_REACH, Grain
from spinfit.species import Species, Spin

NU, LOW, HIGH = 9500.0, 0.001, 924.0


@pytest.mark.parametrize("d", [4750.0, 5000.0, 5200.0, 5400.0])
@pytest.mark.parametrize("width", [3.0, 10.0])
def test_every_resonance_lies_in_a_leaf(d: float, width: float) -> None:
    (system,) = systems(Species("q", (Spin(1.5, (2.0,), d),)))
    shape = Shape.from_widths(width, 0.0)
    request = Request(NU, LOW, HIGH, Grain.of(shape, 1e-3), shape.scale, 1e-3)
    theta = np.linspace(0, np.pi / 2, 9)
    nodes = FieldNodes(system, request, np.stack([np.sin(theta), 0 * theta, np.cos(theta)], axis=1))
    nodes.choose(28.0 * shape.scale * 1e-3 * 70)
    between = np.linspace(0.02, np.pi / 2 - 0.02, 300)
    ways = np.stack([np.sin(between), 0 * between, np.cos(between)], axis=1)
    found = find(system, ways, NU, (LOW, HIGH))
    strong = found.weight > 1e-2 * found.weight.max()
    covered = np.zeros(len(found.field), dtype=bool)
    for first, _, last in nodes.leaves:
        covered |= (found.field >= first) & (found.field <= last)
    assert covered[strong].all()


def test_knots_on_both_sides_of_resonance_are_marked() -> None:
    # two nodes, four knots, three pairs: the first changes sign over the knots, the second at one knot, the third never
    gap = np.array(
        [
            [[5.0, 3.0, 1.0], [2.0, 3.0, 1.0], [-1.0, 3.0, 1.0], [-4.0, 3.0, 1.0]],
            [[6.0, 3.0, 1.0], [3.0, -3.0, 1.0], [-2.0, 3.0, 1.0], [-5.0, 3.0, 1.0]],
        ]
    )
    marked = between_knots(gap)
    assert marked[:, 0].tolist() == [False, True, True, False]
    assert not marked[:, 1:].any()


@pytest.mark.parametrize("scale", [0.5, 5.0])
def test_pairs_out_of_sight(scale: float) -> None:
    """Pairs that are resonant nowhere in the window, by exact resonances at many directions between the knots."""
    (system,) = systems(Species("q", (Spin(3.5, (2.0,), 1500.0, 300.0),)))
    margin = SMEAR_REACH * SMEAR_MOST * scale
    low, high = 1150.0, 1250.0
    shape = Shape(scale, 0.0)
    request = Request(34_000.0, low - margin, high + margin, Grain.of(shape, 1e-3), shape.scale, 1e-3)
    nodes = FieldNodes(system, request, Rings("octant", 8, 10, 2).directions(np.eye(3)))
    nodes.choose(node_accuracy(request))
    data = nodes.data()
    seen = in_sight(data, np.arange(len(data.gap)), request)
    ways = np.random.default_rng(2).normal(size=(400, 3))
    found = find(system, ways / np.linalg.norm(ways, axis=1, keepdims=True), 34_000.0, (low, high))
    there = set(zip(found.lower.tolist(), found.upper.tolist(), strict=True))
    pairs = list(zip(data.pairs[0].tolist(), data.pairs[1].tolist(), strict=True))
    kept = {pair for pair, one in zip(pairs, seen, strict=True) if one}
    assert there & set(pairs) <= kept
    assert len(kept) < len(pairs)
