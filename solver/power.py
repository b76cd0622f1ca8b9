"""The power balance: what loads put in is what surfaces and volumes take.

    input of a load      W_l = Re( (i/w) p^T conj(f_l) ) / 2
    taken by a term      W_j = Im(phi_j p^H A_j p) / (2 w)
    sum_l W_l = sum_j W_j

Both follow from (i/(2w)) p^T conj(A p - f) = 0 with real A_j; p^H A_j p is real where A_j is symmetric. The terms of infinite
elements together take what is radiated:

    W = Re sum_ij conj(G_ij) P_ij,   P = (S - S^H) / (4 i w),   S_ij = sum_j phi_j p_i^H A_j p_j

with the fields p_i of the loads by themselves and G that of their combination; P (loads, loads) is Hermitian.
A wave that enters through a port counts as input, what leaves through it as taken; their difference is the net power through
the port.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from murmesh.solver.system import System

Complex = npt.NDArray[np.complex128]
Floats = npt.NDArray[np.float64]
RADIATED_LABEL = "radiated/"
"""How the label of a surface that radiates begins."""


def power_labels(system: System) -> tuple[str, ...]:
    """Whom the taken power belongs to, in a fixed order: volumes, then surfaces."""
    return tuple(dict.fromkeys(term.label for term in system.terms))


def radiated_labels(labels: tuple[str, ...]) -> tuple[str, ...]:
    """Those labels that belong to surfaces of kind `radiating`, "radiated/NAME"."""
    return tuple(label for label in labels if label.startswith(RADIATED_LABEL))


def radiated_forms(system: System, phi: Complex, f: float, alone: Complex) -> Complex:
    """P (surfaces, loads, loads) [W] from the fields (n, loads) of every load by itself, a surface after the other."""
    labels = radiated_labels(power_labels(system))
    forms = np.zeros((len(labels), alone.shape[1], alone.shape[1]), dtype=np.complex128)
    for coefficient, term in zip(phi, system.terms, strict=True):
        if term.label in labels:
            forms[labels.index(term.label)] += coefficient * (alone.conj().T @ (term.matrix @ alone))
    return np.asarray((forms - forms.conj().transpose(0, 2, 1)) / (8j * np.pi * f))


def absorbed_power(system: System, phi: Complex, f: float, field: Complex, labels: tuple[str, ...]) -> Floats:
    """Power [W] taken under each label by the fields (n, r), summed over r; peak amplitudes."""
    taken = np.zeros(len(labels))
    parts = np.ascontiguousarray(field.real), np.ascontiguousarray(field.imag)
    for coefficient, term in zip(phi, system.terms, strict=True):
        if coefficient.imag != 0.0 or not term.symmetric:
            # the matrices are real, so p^H A p is real but for what is not symmetric in A
            products = [term.matrix @ part for part in parts]
            form = complex(sum(float(np.vdot(part, product)) for part, product in zip(parts, products, strict=True)))
            if not term.symmetric:
                form += 1j * (float(np.vdot(parts[0], products[1])) - float(np.vdot(parts[1], products[0])))
            taken[labels.index(term.label)] += (coefficient * form).imag / (4 * np.pi * f)
    return taken


def input_power(f: float, forces: Complex, given: Complex, reaction: Complex | None, field: Complex, mix: Complex) -> Floats:
    """Power [W] that each load (columns of forces and given) puts in.

    A prescribed pressure drives through the reaction A p - f of the unknowns it holds: conj(given) picks its own share.
    """
    pressure_form = forces.conj().T @ field  # (loads, r): conj(f_l)^T p_r
    work = np.real(1j * np.sum(pressure_form * mix.conj(), axis=1)) / (4 * np.pi * f)
    if reaction is not None:
        held = given.T @ reaction.conj()
        work = work + np.real(1j * np.sum(held * mix, axis=1)) / (4 * np.pi * f)
    return np.asarray(work, dtype=np.float64)
