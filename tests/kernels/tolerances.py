"""Tolerances of the kernel tests, each with its reason."""

TWIN = 1e-10
"""Kernel against loop twin: both sum fewer than a few hundred float64 terms of one sign, or logs
below 60 in size, so that rounding stays under 1e-12; least squares with two decades to spare."""

AXIOM = 1e-9
"""An axiom compares two kernel runs on different numbers: a few times the rounding of one run."""

EXACT = 1e-12
"""Statements that hold exactly on paper for published data of a few periods and products."""

FAILS = 1e-3
"""A counter-example must fail by far more than any rounding."""
