"""The constraints table: linear limits on slices that corridors and caps cannot say.

Rows of one `name` are one constraint: lower <= sum of coefficient * shares of the buckets named
<= upper. Buckets count from 1 within each order, as in the schedule of the same plan. The lower and
upper of a constraint stand in any one of its rows, or the same in several of them.

Canonical frame: `name`, `order_id`, `bucket` (whole), `coefficient`, `lower` and `upper`: those
of the constraint, repeated in each of its rows, NaN where there is none.
"""

from __future__ import annotations

import numpy as np

from scheduler.tables.columns import Number, Words
from scheduler.tables.draft import Draft, Table, gates

MOST = 1e15
"""Amounts beyond this are no shares."""
_SIDES = ("lower", "upper")

_LIMIT = "of the sum of coefficient x shares; in any one row of the name, or the same in several"

TABLE = Table(
    "constraints",
    (
        Words("name", "a name for the constraint; the rows of one name are one", required=True),
        Words("order_id", "as in the orders table", required=True),
        Number("bucket", "the order's bucket, from 1 as in schedule.csv", required=True, low=1),
        Number("coefficient", "what a share counts, not 0", required=True, low=-MOST, high=MOST),
        Number("lower", f"least {_LIMIT}", empty="no limit", low=-MOST, high=MOST),
        Number("upper", f"most {_LIMIT}", empty="no limit", low=-MOST, high=MOST),
    ),
    unique=("name", "order_id", "bucket"),
)


def _check_numbers(draft: Draft) -> None:
    part = (draft.frame["bucket"] % 1 > 0).to_numpy()
    draft.flag(part, "bucket", "is not a whole number", "count buckets 1, 2, 3 ...")
    nothing = (draft.frame["coefficient"] == 0).to_numpy()
    draft.flag(nothing, "coefficient", "is 0", "leave the row out, or give what a share counts")


def _spread_limits(draft: Draft) -> None:
    """Give every row of a constraint its limits; flag those that contradict each other."""
    if draft.problems:
        return
    frame = draft.frame
    group = frame.groupby("name", sort=False)
    for side in _SIDES:
        given = group[side].transform("first")
        other = (frame[side].notna() & (frame[side] != given)).to_numpy()
        draft.flag(other, side, "differs within one constraint", "give it once, or alike")
        frame[side] = given
    first = (~frame.duplicated("name")).to_numpy()
    bare = first & frame["lower"].isna().to_numpy() & frame["upper"].isna().to_numpy()
    draft.flag(bare, "name", "has no limit on either side", "fill in its lower or upper")
    crossed = first & (frame["lower"] > frame["upper"]).to_numpy()
    for at in np.flatnonzero(crossed).tolist():
        rule = f"has a lower limit, {frame['lower'].iat[at]:g}, above its upper one"
        draft.flag_row(at, "name", f"{rule}, {frame['upper'].iat[at]:g}", "exchange the two")


ensure, read_constraints = gates(TABLE, _check_numbers, _spread_limits)
