"""Doublets without structure: what a few knots tell exactly.

The levels of H = c + B n.Z on two states lie |B| (n.G.n)^(1/2) apart, so that B^-2 at resonance is a
quadratic form in the direction, and so is W B^-3 as long as populations follow from the levels' distance,
which is h nu.  Both are held exactly by three rings.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from spinfit.branches import Branches, KnotData, Request, count_roots, trace_branches
from spinfit.hamiltonian import System
from spinfit.nodes import FieldNodes, node_accuracy
from spinfit.orientations import Rings
from spinfit.sheets import continued
from spinfit.symmetry import Symmetry

Array = NDArray[np.float64]


def doublet(system: System, symmetry: Symmetry, request: Request) -> tuple[Rings, KnotData, Branches, int] | None:
    """Return rings, data, branch and number of diagonalisations of a doublet, None where they would not be exact.

    Weak nuclei, widths of their own, aligned samples and polarised states have a say in the direction; and
    resonances that leave the range are not continued as B^-2.

    Parameters
    ----------
    system : System
        Of two states.
    """
    special = request.weigh is not None or request.broadening is not None or request.populations is not None
    split = np.abs(system.h0 - np.trace(system.h0) / 2 * np.eye(2)).max()
    if special or system.weak or split > 1e-9 * request.frequency:
        return None
    rings = Rings(symmetry.kind, 2, 2, 2)
    nodes = FieldNodes(system, request, rings.directions(symmetry.axes))
    nodes.choose(node_accuracy(request))
    data = nodes.data()
    if len(data.gap) != 1 or not (count_roots(data) == 1).all():
        return None
    branches = trace_branches(data, np.zeros(1, dtype=np.intp))
    if not continued(branches.field, branches.weight)[2].all():
        return None
    return rings, data, branches, nodes.count
