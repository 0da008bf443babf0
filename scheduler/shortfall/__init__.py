"""What came of a plan: shortfall and its parts, market prices beside the fills, chance, groups.

`parts` is arithmetic on arrays alone; `traded` lays fills on a plan's buckets, `prices` reads what
the market traded at from bars and closes, `chance` says what the promised law makes of the outcome,
`groups` adds up.
"""
