"""The report: short sections of plain text on standard output."""

import textwrap
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

import fockhull as fh
from noisy_measurement import Measurements
from parameter_sweep import CutLevel, Sweep, leading_limit
from systems import CHAIN_LENGTH, NEIGHBOUR_REPULSION, ring_current, ring_slope

WIDTH = 88


def introduction() -> None:
    say(
        "The Institute for Slightly Excited Matter, which does not exist, tests its density-matrix "
        "functionals on three systems. These are its reference values."
    )


def hydrogen(chain: Sweep, chains: Sequence[fh.Ensemble]) -> None:
    sector, limit = chain.polytope.sector, filled_limit(chain)
    heading(f"Hydrogen chain of {sector.modes} atoms, stretched")
    say(
        f"Three states with weights {listed(chain.polytope.weights)}; {sector.dimension} "
        "configurations with as many electrons up as down. Energies in hartree, bond length in "
        "bohr. S is the total spin of each state, E_w the energy of the ensemble. 'Filled' is the "
        f"sum of the {sector.particles[0]} largest occupations of each spin: at most "
        f"{sector.total_particles} for one state, at most {limit:g} with these weights. "
        "'Stretch' says how far the occupations could be scaled away from equal ones before they "
        "become impossible; it is at least 1 if they are allowed."
    )
    print("  bond          E1     E2-E1     E3-E1   S            E_w    filled   stretch")
    for i in rows_of(chain, 7):
        ensemble = chain.ensembles[i]
        spins = " ".join(f"{s:.0f}" for s in total_spins(ensemble))
        _, second, third = ensemble.excitation_energies
        print(
            f"{chain.values[i]:6.2f}{ensemble.energies[0]:12.6f}{second:10.6f}{third:10.6f}"
            f"   {spins}{ensemble.energy:14.6f}{chain.leading_occupation[i]:10.4f}"
            f"{chain.stretches[i].value:10.4f}"
        )
    certificate(chain, "hartree")
    at = chain.nearest(CHAIN_LENGTH)
    numbers = "  ".join(f"{n:.4f}" for n in chain.ensembles[at].occupations[0])
    say(f"Natural occupations at {chain.values[at]:.2f} bohr, alike for both spins: {numbers}.")
    tightest(chain, f"at {chain.values[0]:g} bohr", 0)
    print(f"\nChains of other lengths at {CHAIN_LENGTH:g} bohr:")
    print(" atoms   configurations   E1 per atom     E2-E1   error bound   no level missed")
    for e in chains:
        atoms = e.hamiltonian.sector.modes
        print(
            f"{atoms:6d}{e.hamiltonian.dimension:17,d}{e.energies[0] / atoms:14.6f}"
            f"{e.excitation_energies[1]:10.6f}{e.error_bounds.max():14.0e}   {e.level_count.kind}"
        )


def ring(sweep: Sweep) -> None:
    sector, limit = sweep.polytope.sector, filled_limit(sweep)
    heading(f"Ring of {sector.modes} sites with {sector.particles} fermions, threaded by a flux")
    say(
        f"Two states with weights {listed(sweep.polytope.weights)}; repulsion "
        f"{NEIGHBOUR_REPULSION:g} t between neighbours. Energies and current in units of t. The "
        "current round the ring is read off the complex density matrix. 'Filled' is "
        f"n1 + ... + n{sector.particles}: at most {sector.particles} for one state, at most "
        f"{limit:g} with these weights."
    )
    print("  flux/pi          E1     E2-E1         E_w    current    filled   stretch")
    for i in rows_of(sweep, 9):
        ensemble = sweep.ensembles[i]
        current = round(ring_current(ensemble), 5) + 0.0  # no minus sign before zero
        print(
            f"{sweep.values[i] / np.pi:9.2f}{ensemble.energies[0]:12.6f}"
            f"{ensemble.excitation_energies[1]:10.6f}{ensemble.energy:12.6f}{current:11.5f}"
            f"{sweep.leading_occupation[i]:10.4f}{sweep.stretches[i].value:10.4f}"
        )
    certificate(sweep, "t")
    cut_levels(sweep.cut_levels)
    from_matrix, from_energies = ring_slope(sweep, np.pi / 2)
    say(
        f"Check at flux pi/2: current {from_matrix:.8f} from the density matrix, "
        f"{from_energies:.8f} from the slope of E_w."
    )
    lowest = int(np.argmin([s.value for s in sweep.stretches]))
    tightest(sweep, f"at flux {sweep.values[lowest] / np.pi:.2f} pi", lowest)


def bosons(sweep: Sweep) -> None:
    sector, limit = sweep.polytope.sector, filled_limit(sweep)
    heading(f"Chain of {sector.modes} sites with {sector.particles} bosons, repulsion U rising")
    say(
        f"Two states with weights {listed(sweep.polytope.weights)}; energies in units of t. Bosons "
        "know no Pauli principle, but two orthogonal states cannot both have all particles in one "
        f"mode: the largest occupation obeys n1 <= N - 1 + w1 = {limit:g}."
    )
    print("   U/t          E1     E2-E1         E_w        n1   limit-n1   stretch")
    for i in rows_of(sweep, 7):
        ensemble = sweep.ensembles[i]
        largest = ensemble.occupations[0]
        print(
            f"{sweep.values[i]:6.2f}{ensemble.energies[0]:12.6f}"
            f"{ensemble.excitation_energies[1]:10.6f}{ensemble.energy:12.6f}{largest:10.4f}"
            f"{round(limit - largest, 4) + 0.0:11.4f}{sweep.stretches[i].value:10.4f}"
        )
    certificate(sweep, "t")
    second = 1  # at U = 0 several limits are met at once
    tightest(sweep, f"at U = {sweep.values[second]:g} t", second)


def measurements(batch: Measurements, noise: float) -> None:
    polytope, copies = batch.polytope, len(batch.noisy)
    heading("Noisy density matrices, repaired")
    say(
        f"{copies} simulated measurements of the chain of {polytope.sector.modes} hydrogen atoms "
        f"at 1.2 bohr, noise {noise:g} on each element. Allowed as measured: "
        f"{np.sum(polytope.contains(batch.noisy))}. With the traces and Pauli's principle "
        f"restored, {np.sum(batch.left_over > 1e-9)} are still impossible for an ensemble with "
        f"weights {listed(polytope.weights)}. The worst of them:"
    )
    noisy, pauli = batch.noisy[batch.worst], batch.pauli.density_matrix[batch.worst]
    met = polytope.stretch(pauli)
    mended = polytope.project(noisy)
    filled = batch.leading(batch.occupations(pauli))
    up, down = np.trace(noisy, axis1=-2, axis2=-1)
    facts = {
        "traces (up, down)": f"{up:.4f}, {down:.4f} instead of 2, 2",
        "distance from allowed": f"{mended.distance:.6f}, proved at least "
        f"{mended.distance_lower:.6f}",
        "with Pauli restored": f"filled {filled:.4f}, still violates (stretch {met.value:.4f})",
        "  the constraint": str(met.constraint),
        "repaired": f"filled {batch.leading(mended.occupations):.4f}, allowed: "
        f"{yes(polytope.contains(mended.density_matrix))}",
        "explicit ensemble": f"{len(mended.ensemble)} terms of {len(polytope.weights)} "
        f"configurations, verified: {yes(mended.ensemble.verify(mended.occupations))}",
    }
    for name, value in facts.items():
        print(f"  {name:23s}{value}")
    before, after = batch.error(batch.noisy), batch.error(batch.repaired.density_matrix)
    say(
        f"Repairing helps: the mean distance from the exact matrix falls from {before.mean():.4f} "
        f"to {after.mean():.4f}, in {np.sum(after < before)} of {copies} copies it becomes less."
    )


def files(written: Sequence[tuple[Path, str]]) -> None:
    heading("Files")
    for path, what in written:
        inside = path.resolve().is_relative_to(Path.cwd())
        shown = path.resolve().relative_to(Path.cwd()) if inside else path
        print(f"  {shown}: {what}")


def heading(text: str) -> None:
    print(f"\n{text}\n{'-' * len(text)}")


def say(text: str) -> None:
    print(textwrap.fill(text, WIDTH, break_on_hyphens=False))


def listed(values: Iterable[float]) -> str:
    return ", ".join(f"{w:g}" for w in values)


def yes(value: bool) -> str:
    return "yes" if value else "no"


def rows_of(sweep: Sweep, count: int) -> list[int]:
    """Indices of evenly spread points for a table."""
    return sorted({round(x) for x in np.linspace(0, len(sweep.values) - 1, count)})


def filled_limit(sweep: Sweep) -> float:
    return leading_limit(sweep.polytope.sector, sweep.polytope.weights)


def total_spins(ensemble: fh.Ensemble) -> list[float]:
    """S from <S^2> = S (S + 1); rounding noise below zero is cut off."""
    return list(np.sqrt(ensemble.spin_squared.clip(min=0.0) + 0.25) - 0.5)


def certificate(sweep: Sweep, unit: str) -> None:
    """Say how accurate the energies are and how sure it is that none was missed."""
    bound = max(e.error_bounds.max() for e in sweep.ensembles)
    sure = " and ".join(sorted({e.level_count.kind for e in sweep.ensembles}))
    say(f"Error bound of every energy: {bound:.0e} {unit} or less; no level missed: {sure}.")


def tightest(sweep: Sweep, where: str, index: int) -> None:
    stretch = sweep.stretches[index]
    words = stretch.constraint or "none with a name"
    say(f"Tightest constraint {where}: {words} (stretch {stretch.value:.4f}).")


def cut_levels(cuts: Sequence[CutLevel]) -> None:
    """Say where weights would have cut a degenerate level, and what was done."""
    if not cuts:
        return
    where = ", ".join(f"{c.value / np.pi:g} pi (levels {c.first}-{c.last})" for c in cuts)
    say(
        f"Levels are degenerate but weighted unequally at flux {where}. E_w is unique there, the "
        "density matrix is not; the symmetric one is used, with the weights averaged over the "
        "level."
    )
