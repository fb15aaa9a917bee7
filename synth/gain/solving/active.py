"""What every link contributes to its row at a point: the active slopes of the operator."""

from __future__ import annotations

import numpy as np

from synth.gain.operator import Floats, GainOperator


def slope_weights(operator: GainOperator, s: Floats, image: Floats) -> Floats:
    """gain * dG/d(gain) of every link at ``s`` (size,) > 0, ``image`` = G(s): they add up to G(s) row by row.

    Of alternatives, and of the links of a max row, the first largest counts and the others get zero. In a row of roots
    a term counts by the share of its inlet: t * (sum of the inlet) / G(s)_i.
    """
    plan = operator.layout
    weights = np.zeros(operator.gain.size)
    if weights.size == 0:
        return weights
    terms = plan.gain * s[plan.source]
    sorted_weights = np.where(plan.winners(terms), terms, 0.0)
    if not plan.single_inlets:
        inlets = plan.inlets(plan.pieces(terms))
        row = image[plan.row][plan.row_of_inlet]
        # With a single inlet this share is one up to rounding.
        share = np.divide(inlets, row, out=np.zeros(inlets.size), where=row > 0)
        sorted_weights *= share[plan.inlet_of_piece][plan.piece_of_link]
    weights[plan.order] = sorted_weights
    return weights
