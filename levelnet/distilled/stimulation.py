"""The stimulated part of 2s-1s decay in exported code: local polynomials, C and Fortran."""

from __future__ import annotations

import numpy as np

from ..arrays import FloatArray
from ..atomic.two_photon import stimulated_two_photon_factor

_DEGREE = 11

_C_TABLE = """
/* ln of the stimulated over the spontaneous 2s-1s rate: cell in x, power. */
enum {{ STIMULATION_TERMS = {terms} }};
static const double STIMULATION[CELLS_X * STIMULATION_TERMS] = {{
{numbers}
}};
"""
_C_FUNCTION = """
static double stimulation(double radiation_k)
{
    const place in_x = locate(log(radiation_k), X_LOW, X_HIGH, CELLS_X);
    double value = 0.0;
    for (int k = STIMULATION_TERMS - 1; k >= 0; --k)
        value = value * in_x.t + STIMULATION[in_x.cell * STIMULATION_TERMS + k];
    return exp(value);
}
"""
_FORTRAN_TABLE = """\
  ! ln of the stimulated over the spontaneous 2s-1s rate: power, cell in x.
  real(dp), save :: stimulation_terms(0:{top}, cells_x)
"""
_FORTRAN_FUNCTION = """
  ! Stimulated over spontaneous 2s-1s rate.
  pure real(dp) function stimulation(radiation_k)
    real(dp), intent(in) :: radiation_k
    real(dp) :: t
    integer :: cell, k
    call locate(log(radiation_k), x_low, x_high, cells_x, cell, t)
    stimulation = 0.0_dp
    do k = ubound(stimulation_terms, 1), 0, -1
      stimulation = stimulation * t + stimulation_terms(k, cell)
    end do
    stimulation = exp(stimulation)
  end function stimulation
"""


def stimulation_polynomials(
    log_low: float, log_high: float, cells: int, transition_energy_ev: float
) -> FloatArray:
    """Ln of the stimulated over the spontaneous 2s-1s rate as polynomials in ln T_r.

    Parameters
    ----------
    log_low, log_high : float, dimensionless
        Range of ln(T_r/K).
    cells : int
        Number of equal cells.
    transition_energy_ev : float, eV
        Energy of 2s above the ground state.

    Returns
    -------
    ndarray, shape (cells, 12), dimensionless
        Coefficients, lowest power first, of t from -1 to 1 across each cell; interpolated at
        Chebyshev points.
    """
    t = np.cos(np.pi * (np.arange(_DEGREE + 1) + 0.5) / (_DEGREE + 1))
    step = (log_high - log_low) / cells
    x = log_low + step * (np.arange(cells)[:, None] + 0.5 * (t + 1.0))
    value = np.log(stimulated_two_photon_factor(np.exp(x), transition_energy_ev))
    return np.asarray(np.polynomial.polynomial.polyfit(t, value.T, _DEGREE).T, dtype=float)


def stimulation_c(numbers: str) -> dict[str, str]:
    """Blanks of the C source; `numbers` are the coefficients, "" for spontaneous decay."""
    names = ("stimulation_table", "stimulation_function", "stimulation_factor")
    if not numbers:
        return dict.fromkeys(names, "")
    table = _C_TABLE.format(terms=_DEGREE + 1, numbers=numbers)
    return dict(
        zip(names, (table, _C_FUNCTION, " *\n               stimulation(reduced_k)"), strict=True)
    )


def stimulation_fortran(statements: str) -> dict[str, str]:
    """Blanks of the Fortran source; `statements` hold the coefficients, "" for spontaneous."""
    names = ("stimulation_table", "stimulation_function", "stimulation_factor")
    if not statements:
        return dict.fromkeys(names, "")
    table = _FORTRAN_TABLE.format(top=_DEGREE) + statements
    factor = " &\n      * stimulation(reduced_k)"
    return dict(zip(names, (table, _FORTRAN_FUNCTION, factor), strict=True))
