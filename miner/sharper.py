"""The test of a superset being sharper than a rule it contains, in discovery and in the holdout."""

from __future__ import annotations

import numpy as np

from miner.kernels import hits as kernels
from miner.kernels import tails
from miner.nulls.margins import Margins
from miner.units import Case

NODES, WEIGHTS = np.polynomial.hermite.hermgauss(21)


def sharper_p(
    case: Case, margins: Margins, is_left: np.ndarray, larger: int, smaller: int
) -> float:
    """p-value of ``larger`` hitting more than the rate of ``smaller`` leads to expect.

    That rate is the null's odds times one ratio, estimated on the triggers of ``smaller`` that
    are not within the horizon of one of ``larger``; the estimate's uncertainty is part of the p.

    Parameters
    ----------
    margins : the null, fitted
    is_left : bool, one a trigger of ``case.unit.triggers``
    larger, smaller : rows of its combinations
    """
    table = case.unit.triggers
    own = slice(table.offset_c[larger], table.offset_c[larger + 1])
    rest = slice(table.offset_c[smaller], table.offset_c[smaller + 1])
    is_own, is_rest = is_left[own], is_left[rest].copy()
    is_rest &= ~kernels.near_any(
        table.entity[rest],
        table.session[rest],
        table.entity[own][is_own],
        table.session[own][is_own],
        case.unit.horizon,
    )
    return float(
        tails.sharper_p_value(
            margins.rates(table.entity[rest][is_rest], table.session[rest][is_rest]),
            int(case.is_hit[rest][is_rest].sum()),
            margins.rates(table.entity[own][is_own], table.session[own][is_own]),
            int(case.is_hit[own][is_own].sum()),
            NODES,
            WEIGHTS,
        )
    )
