"""Why two basins differ: the cells at which their directions part, on ground where the reason is known."""

import numpy as np
import pytest

from basinwright.audit import CAUSES, Drawn, _causes

ROWS, COLS = 9, 7
OUTLET = (7, 2)
CELL_M = (10.0, 10.0)


def valleys():
    """Two valleys, columns 1 to 2 and 3 to 5, that fall to the south; the ridge cell (3, 3) stands between them."""
    z = 100.0 - np.arange(ROWS)[:, None] * np.ones(COLS) + np.array([9, 3, 0, 3, 0, 3, 9.0])
    z[3, 3] = z[3, 2] + 2.0
    return z


def drawn(z, turn):
    """Columns 1 and 2 drain to column 2 and the outlet; column 3 to column 4, its cell in row 3 by choice."""
    index = np.arange(ROWS * COLS).reshape(ROWS, COLS)
    down = np.full((ROWS, COLS), -1)
    down[1:7, 2] = index[2:8, 2]
    down[1:8, 1] = index[1:8, 2]
    down[1:7, 4] = index[2:8, 4]
    down[1:8, 3] = index[1:8, 4]
    down[1:8, 5] = index[1:8, 4]
    down[1:3, 3] = index[2:4, 3]  # rows 1 and 2 of column 3 run down to the cell that chooses
    down[3, 3] = -1 if turn is None else index[3, 3 + turn]
    down = down.ravel()
    basin = np.zeros(down.size, bool)
    for cell in range(down.size):
        at = cell
        while down[at] >= 0:
            at = down[at]
        basin[cell] = at == index[OUTLET]
    return Drawn(basin.reshape(ROWS, COLS), down, z)


def case(cause):
    """Our and their surface, their turn, and the unconditioned elevations."""
    z = valleys()
    ours, theirs, raw, turn = z.copy(), z.copy(), z.copy(), 1
    if cause == "tie":
        ours[3, 4] = theirs[3, 4] = ours[3, 2]
    elif cause == "other":
        ours[3, 4] = theirs[3, 4] = ours[3, 2] - 0.01
    elif cause == "flat":
        ours[3, 3] = theirs[3, 3] = ours[3, 2]
    elif cause == "cut":
        ours[3, 2] -= 1.5
    elif cause == "edge":
        raw[3, 5] = np.nan  # beside the cell to which theirs turns
    elif cause == "lost":
        turn = None
    return ours, theirs, raw, turn


@pytest.mark.parametrize("cause", [*CAUSES, "lost"])
def test_cause(cause):
    ours_m, theirs_m, raw, turn = case(cause)
    ours, theirs = drawn(ours_m, -1), drawn(theirs_m, turn)
    assert ours.basin.sum() - theirs.basin.sum() == 3
    area = np.full((ROWS, COLS), 2.0)
    name = "flat" if cause == "lost" else cause
    assert _causes(ours, theirs, raw, area, CELL_M) == {name: 6.0}
    if cause != "lost":
        assert _causes(theirs, ours, raw, area, CELL_M) == {name: 6.0}, "whoever has more"


def test_equal_basins_have_no_cause():
    one = drawn(valleys(), -1)
    assert _causes(one, one, valleys(), np.ones((ROWS, COLS)), CELL_M) == {}
