"""One run, from a setup to a history."""

from __future__ import annotations

import warnings

from ..errors import AccuracyWarning, InputError
from ..escape.treatment import LineTreatment
from ..numerics.threads import one_blas_thread
from ..pieces import Pieces
from .cost import check_memory
from .integrate import Progress, integrate_history
from .outputs import assemble_history
from .result import History
from .setup import Setup


def solve(
    setup: Setup,
    *,
    progress: Progress | None = None,
    pieces: Pieces | None = None,
    line_treatment: LineTreatment | None = None,
    strict: bool = False,
) -> History:
    """Compute one ionization history with all level populations.

    Parameters
    ----------
    setup : Setup
        What to compute.
    progress : callable, optional
        ``progress(stage, fraction)``, called now and then with 0 <= fraction <= 1.
    pieces : Pieces, optional
        Store of reduced networks, such as ``levelnet.pieces.FolderPieces(folder)``; a repeated run
        with the same atom then skips the reduction. Populations that take long are kept there too,
        output by output, and a long march of a resolved field, stretch by stretch: a run that was
        killed goes on, to the same bits.
    line_treatment : LineTreatment, optional
        A treatment of the resonance lines of your own, in place of the one the setup names.
    strict : bool
        Raise SolveError, with the partial history attached, unless the outcome is CONVERGED.

    Returns
    -------
    History
        Fractions, temperatures and populations at every output redshift; `outcome` says how it
        ended and `notes` what to know before relying on it.

    Raises
    ------
    InputError
        If the run cannot fit in memory or nothing connects hydrogen to its ground state.
    SolveError
        If a network is singular; or, with `strict`, if the run did not converge.

    Notes
    -----
    Excited levels are quasi-steady. The error of x_e from stepping and interpolation is below
    ``setup.accuracy.relative``; what the chosen physics leaves out (line transfer, collisions,
    helium) is larger and listed in ``history.notes``.

    References
    ----------
    Ali-Haimoud & Hirata 2010, Phys. Rev. D 82, 063521 (reduction of the network).
    """
    if not isinstance(setup, Setup):
        raise InputError(f"setup: a Setup is needed, not {type(setup).__name__}")
    tell = progress or (lambda stage, fraction: None)
    check_memory(setup)
    with one_blas_thread():
        integrated = integrate_history(setup, tell, pieces, line_treatment)
        history = assemble_history(setup, integrated, tell, pieces)
    if strict:
        history.require_converged()
    elif not history.outcome.ok:
        warnings.warn(history.outcome.value, AccuracyWarning, stacklevel=2)
    return history
