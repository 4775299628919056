"""The exact rational functions that a model's own numbers stand for."""

from __future__ import annotations

from typing import Any

from realize.models.base import Model
from realize.models.matrix_fraction import MatrixFraction
from realize.models.pole_residue import PoleResidue
from realize.models.second_order import SecondOrder
from realize.models.sections import Sections
from realize.models.state_space import StateSpace
from realize.models.transfer_function import TransferFunction
from realize.models.zero_pole_gain import ZeroPoleGain
from realize.schema import KINDS


def form_fractions(model: Model) -> list[list[tuple[Any, Any]]]:
    """Return the exact fractions of a model, formed once; see `_formed`."""
    return model.remembered("fractions", lambda: _formed(model))


def _formed(model: Model) -> list[list[tuple[Any, Any]]]:
    """Return the exact (numerator, denominator) of each channel as python-flint polynomials, common factors kept.

    Decimals count as typed, doubles as the binary fractions they are.
    """
    from realize.kernels.exact import polynomials, states
    from realize.kernels.exact.numbers import fraction

    p, m = model.shape
    if isinstance(model, TransferFunction):
        numerators, denominators = model.exact("numerator"), model.exact("denominator")
        return [
            [(polynomials.polynomial(numerators[i][j]), polynomials.polynomial(denominators[i][j])) for j in range(m)]
            for i in range(p)
        ]
    if isinstance(model, ZeroPoleGain):
        zeros, poles, gain = model.exact("zeros"), model.exact("poles"), model.exact("gain")
        return [
            [
                (polynomials.from_roots(zeros[i][j]) * fraction(gain[i][j]), polynomials.from_roots(poles[i][j]))
                for j in range(m)
            ]
            for i in range(p)
        ]
    if isinstance(model, PoleResidue):
        poles, residues, direct = model.exact("poles"), model.exact("residues"), model.exact("direct")
        powers = [int(power) for power in model.powers]
        return [
            [
                polynomials.from_partial_fractions(
                    poles, [residue[i][j] for residue in residues], powers, [matrix[i][j] for matrix in direct]
                )
                for j in range(m)
            ]
            for i in range(p)
        ]
    if isinstance(model, Sections):
        return [[polynomials.from_sections(model.exact("sections"), model.exact("gain"))]]
    if isinstance(model, StateSpace):
        numerators, denominator = states.transfer_matrix(*(model.exact(name) for name in "ABCDE"))
        return [[(numerators[i][j], denominator) for j in range(m)] for i in range(p)]
    if isinstance(model, MatrixFraction):
        from realize.errors import InputError
        from realize.kernels.exact.matrix_fractions import ZeroDeterminant, multiplied_out

        try:
            numerators, denominator = multiplied_out(
                model.polynomials("numerator"), model.polynomials("denominator"), model.side
            )
        except ZeroDeterminant:
            raise InputError(
                "a determinant that is zero for every s", "a denominator that can be inverted", field="denominator"
            ) from None
        return [[(numerators[i][j], denominator) for j in range(m)] for i in range(p)]
    if isinstance(model, SecondOrder):
        from realize.kernels.exact.second_order import transfer_matrix

        fields = (model.exact(f.name) for f in KINDS[model.kind].fields)
        numerators, denominator = transfer_matrix(*fields)
        return [[(numerators[i][j], denominator) for j in range(m)] for i in range(p)]
    raise TypeError(f"a {model.kind} has no exact fractions")
