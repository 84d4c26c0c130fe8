"""A bench that does not exist: two arms, light, a stage and a detector, with faults on demand.

It has physics of its own, worked out by integration over the spectrum, and shares no formula with
the estimator: a test that locates its zero proves more than that a formula inverts itself.
"""
