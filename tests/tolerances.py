"""Named tolerances of the tests; each says why it has its size. All are relative unless said.

A tolerance used in one test only stands in that test, with its reason beside it.
"""

# A few operations in doubles, each good to 1.1e-16; room for some tens of them.
ROUND_OFF = 1e-14

# Thermal limit and particle conservation of the network up to n_max = 300: the elimination adds
# terms of one sign only, so errors add up and are not magnified.
CONSERVATION = 1e-13

# Departure coefficients of a network in full equilibrium (absolute, in the logarithm).
EQUILIBRIUM = 1e-12

# Our elimination against a general sparse solver on the same matrix: the condition of the unscaled
# matrix (up to 1e8 at 2500 K) limits the general solver, not ours.
ELIMINATION = 1e-10

# Einstein A against exact arithmetic up to n = 1000: the recurrence loses about n units in the last
# place from its logarithmic start.
RECURRENCE = 1e-10

# Photoionization cross sections against closed forms up to n = 500: the same recurrence with one
# more scale to carry.
CROSS_SECTION = 1e-9

# Integrals over the continuum (recombination coefficients, two-photon rate): what the rules are
# built for.
QUADRATURE = 1e-8

# Chebyshev series in ln T_r, error off the nodes in the logarithm (absolute); the nodes are chosen
# for a tenth of it.
INTERPOLATION = 1e-8

# A whole history against an independent integration of the same equations.
HISTORY = 1e-7

# Step control with the default accuracy.relative = 1e-6: the error allowed in the slow variables.
STEPPING = 1e-6

# A measured constant against the same CODATA edition elsewhere: digits as published.
CODATA = 1e-12


def published(digits: int) -> float:
    """Half a unit in the last of `digits` significant digits; relative, for a leading digit 1."""
    return 0.5 * 10.0 ** (1 - digits)


# Fitted order of accuracy against theory (absolute, in the exponent).
ORDER = 0.1
