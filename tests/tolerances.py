"""Named tolerances; a literal tolerance in a test needs a reason on its line."""

ALGEBRA = 1e-10  # two ways to the same number in double precision
OPTIMUM = 1e-6  # where an iteration stops
PRINTED = 5e-12  # published or computed values printed to 12 digits
GRADIENT = 1e-5  # exact gradient against central differences
MONTE_CARLO_ERRORS = 4.0  # Monte-Carlo standard errors, computed in the test
