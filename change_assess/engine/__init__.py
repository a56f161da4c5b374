"""The engine: every reported number is a function of design-weighted totals.

`cells` compresses the sample, `design` weighs it and gives covariances, `linearise` carries a value together with
its linearised scores, `estimate` keeps a measure as an expression, `intervals` turns estimates into limits.
"""
