"""Proof that the validator catches errors: small tables, models on them, and deliberate mistakes in the macros."""

#: Which of the defects that were tried have been caught; printed at the end of the tests.
CAUGHT: dict[str, bool] = {}
