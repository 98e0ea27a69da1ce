"""Chances that hold the margins: q = u_e v_c / (1 + u_e v_c), fitted to the counts of Z.

Rows are entities, columns are (peer group, session) pairs. The fitted chances give every row and
column its observed sum; they are the law of largest entropy with those sums (De Bie 2011), the
Rasch model's unconditional estimate.

A row or column that is all 0 or all 1 is sure. After these are peeled off the estimate can still
lie at infinity: a cell may have the same value in every 0/1 table with these margins although its
row and its column are mixed. Draw an arrow row -> column where Z = 1 and column -> row where
Z = 0: values can only be traded along a cycle, so a cell is free exactly when its row and column
lie in one strongly connected component (Fischer 1981 gives the condition for the Rasch model).
Forced cells get q = Z, which is the limit any fit creeps towards.

With the law "hazard" the chance is q = 1 - exp(-u_e v_c) instead, with the same sums. Its fit is
the minimum of a convex function too, the sum of F(a_e + b_c) less what the sums weigh, where
F(x) = x + E1(e^x) has the slope 1 - exp(-e^x).
"""

from collections.abc import Sequence

import numpy as np
from scipy.special import exp1

from .world import Cell, Segment, Unit, World, followed, open_cells, peer_at


def peel(open_rc: np.ndarray, z_rc: np.ndarray) -> np.ndarray:
    """Cells left when sure rows and columns are removed again and again."""
    left = open_rc.copy()
    while True:
        ones, cells = left & z_rc, left
        rows = (ones.sum(1) == 0) | (ones.sum(1) == cells.sum(1))
        columns = (ones.sum(0) == 0) | (ones.sum(0) == cells.sum(0))
        peeled = left & ~rows[:, None] & ~columns[None, :]
        if (peeled == left).all():
            return left
        left = peeled


def forced_cells(open_rc: np.ndarray, z_rc: np.ndarray) -> np.ndarray:
    """Open cells with one value in every table of these margins, by walking the arrows."""
    ones, zeros = (open_rc & z_rc).astype(int), (open_rc & ~z_rc).astype(int)
    reach = np.eye(len(ones), dtype=int)  # row to row, through any number of columns
    while True:
        further = ((reach + reach @ (ones @ zeros.T)) > 0).astype(int)
        if (further == reach).all():
            break
        reach = further
    column_to_row = (zeros.T @ reach).T > 0
    row_to_column = (reach @ ones) > 0
    is_free = np.where(z_rc, column_to_row, row_to_column)
    return np.asarray(open_rc & ~is_free)


def fit_free(free_rc: np.ndarray, z_rc: np.ndarray, law: str = "odds") -> np.ndarray:
    """Newton's method on the free cells; every one lies on a cycle, so the optimum is finite."""
    row_sum, column_sum = (free_rc & z_rc).sum(1), (free_rc & z_rc).sum(0)
    a = np.zeros(len(row_sum))
    b = np.zeros(len(column_sum))

    def chances(a: np.ndarray, b: np.ndarray) -> np.ndarray:
        x = a[:, None] + b[None, :]
        q = -np.expm1(-np.exp(x)) if law == "hazard" else 1 / (1 + np.exp(-x))
        return np.where(free_rc, q, 0.0)

    def slopes(a: np.ndarray, b: np.ndarray, q: np.ndarray) -> np.ndarray:
        return np.exp(a[:, None] + b[None, :]) * (1 - q) if law == "hazard" else q * (1 - q)

    def log_likelihood(a: np.ndarray, b: np.ndarray) -> float:
        x = (a[:, None] + b[None, :])[free_rc]
        log_norm = x + exp1(np.exp(x)) if law == "hazard" else np.logaddexp(0, x)
        return float(a @ row_sum + b @ column_sum - log_norm.sum())

    for _ in range(200):
        q = chances(a, b)
        miss_a, miss_b = row_sum - q.sum(1), column_sum - q.sum(0)
        if max(np.abs(miss_a).max(), np.abs(miss_b).max()) < 1e-12:
            break
        w = np.where(free_rc, slopes(a, b, q), 0.0)
        inverse = np.divide(1, w.sum(0), out=np.zeros(len(b)), where=w.sum(0) > 0)
        # Solve for the rows first, columns eliminated; shifting a against b changes nothing,
        # hence least squares.
        core = np.diag(w.sum(1)) - (w * inverse) @ w.T
        step_a = np.linalg.lstsq(core, miss_a - w @ (inverse * miss_b), rcond=1e-13)[0]
        step_b = inverse * (miss_b - w.T @ step_a)
        size, before = 1.0, log_likelihood(a, b)
        while log_likelihood(a + size * step_a, b + size * step_b) < before - 1e-9 and size > 1e-6:
            size /= 2
        a, b = a + size * step_a, b + size * step_b
    q = chances(a, b)
    miss = max(np.abs(row_sum - q.sum(1)).max(), np.abs(column_sum - q.sum(0)).max())
    if miss > 1e-9:
        raise ArithmeticError(f"the margins are missed by {miss}")
    return q


def fit_margins(
    open_et: np.ndarray, z_et: np.ndarray, peer_et: np.ndarray, law: str = "odds"
) -> np.ndarray:
    """Chances q of the window indicator.

    open_et, z_et: bool, shape (entity, session). peer_et: int codes, same shape.
    Returns float (entity, session), NaN where the cell is not open.
    """
    columns = sorted({(int(peer_et[e, t]), int(t)) for e, t in np.argwhere(open_et)})
    place = {column: c for c, column in enumerate(columns)}
    open_rc = np.zeros((len(open_et), len(columns)), dtype=bool)
    z_rc = open_rc.copy()
    for e, t in np.argwhere(open_et):
        c = place[int(peer_et[e, t]), int(t)]
        open_rc[e, c] = True
        z_rc[e, c] = z_et[e, t]

    free_rc = peel(open_rc, z_rc)
    free_rc = free_rc & ~forced_cells(free_rc, z_rc)
    fitted_rc = fit_free(free_rc, z_rc, law) if free_rc.any() else np.zeros(open_rc.shape)

    q_et = np.full(open_et.shape, np.nan)
    for e, t in np.argwhere(open_et):
        c = place[int(peer_et[e, t]), int(t)]
        q_et[e, t] = fitted_rc[e, c] if free_rc[e, c] else float(z_rc[e, c])
    return q_et


def margins_of_unit(
    world: World, unit: Unit, segment: Segment, cells: Sequence[Cell] | None = None
) -> dict[Cell, float]:
    """q for each open cell of the unit, or for those of them that are given."""
    if cells is None:
        cells = open_cells(world, unit, segment)
    row = {entity: e for e, entity in enumerate(world.known)}
    code = {label: g for g, label in enumerate(sorted({peer_at(world, *cell) for cell in cells}))}
    shape = (len(world.known), world.n_sessions)
    open_et, z_et = np.zeros(shape, dtype=bool), np.zeros(shape, dtype=bool)
    peer_et = np.zeros(shape, dtype=int)
    for entity, t in cells:
        open_et[row[entity], t] = True
        z_et[row[entity], t] = followed(world, unit[0], (entity, t))
        peer_et[row[entity], t] = code[peer_at(world, entity, t)]
    q_et = fit_margins(open_et, z_et, peer_et, world.law)
    return {(entity, t): float(q_et[row[entity], t]) for entity, t in cells}
