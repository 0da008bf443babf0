"""The rest of a plan: what has been filled, what is left, and what that leaves to be planned.

`fills` places fills on orders, `remaining` turns tables into those of the rest, `carried` takes the
imbalance, the price of risk and further limits over, `volume` tells what has come of the forecast,
`solved` plans the rest, `whole` adds up what whole orders cost, `progress` and `standing` say how
far they are, `attribution` why the plan changes.
"""
