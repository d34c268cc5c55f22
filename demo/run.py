"""The main job of fockhull end to end: report, figures and a netCDF file.

python demo/run.py [--small] [--output DIR]
"""

import argparse
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import figures
import fockhull as fh
import report
import storage
from noisy_measurement import Measurements, measure
from parameter_sweep import Sweep
from systems import (
    CHAIN_LENGTH,
    CHAIN_WEIGHTS,
    boson_sweep,
    hydrogen_hamiltonian,
    hydrogen_sweep,
    ring_sweep,
)

NOISE = 0.03


@dataclass(frozen=True)
class Size:
    """How large the systems are and how fine the sweeps."""

    atoms: int
    chain_lengths: tuple[int, ...]
    ring: tuple[int, int]
    boson_sites: int
    bond_lengths: int
    fluxes: int
    repulsions: int
    copies: int


FULL = Size(6, (4, 6, 8), (12, 5), 5, 73, 33, 25, 200)
SMALL = Size(4, (2, 4), (8, 3), 4, 13, 9, 13, 50)


def main() -> None:
    arguments = parse_arguments()
    size = SMALL if arguments.small else FULL
    arguments.output.mkdir(parents=True, exist_ok=True)

    chain = hydrogen_sweep(size.atoms, np.linspace(1.2, 4.8, size.bond_lengths))
    chains = [solve_chain(atoms) for atoms in size.chain_lengths]
    ring = ring_sweep(*size.ring, np.linspace(0.0, 2 * np.pi, size.fluxes))
    bosons = boson_sweep(size.boson_sites, np.linspace(0.0, 12.0, size.repulsions))
    measurements = measure_chain(size.copies)

    report.introduction()
    report.hydrogen(chain, chains)
    report.ring(ring)
    report.bosons(bosons)
    report.measurements(measurements, NOISE)
    report.files(write(arguments.output, chain, ring, bosons, measurements))


def parse_arguments() -> argparse.Namespace:
    parser = argparse.ArgumentParser(description="The main job of fockhull, end to end.")
    parser.add_argument("--small", action="store_true", help="small systems, a few seconds")
    default = Path(__file__).parent / "output"
    parser.add_argument("--output", type=Path, default=default, help="where files are written")
    return parser.parse_args()


def solve_chain(atoms: int) -> fh.Ensemble:
    return fh.solve(hydrogen_hamiltonian(atoms, CHAIN_LENGTH), CHAIN_WEIGHTS)


def measure_chain(copies: int) -> Measurements:
    """Noisy density matrices of four hydrogen atoms at 1.2 bohr."""
    exact = hydrogen_sweep(4, [1.2])
    return measure(exact.ensembles[0], exact.polytope, copies=copies, noise=NOISE, seed=7)


def write(
    folder: Path, chain: Sweep, ring: Sweep, bosons: Sweep, measurements: Measurements
) -> list[tuple[Path, str]]:
    """Write everything and say what each file is."""
    names = ["energies.png", "limits.png", "repair.png", "ensembles.nc"]
    energies, limits, repair, ensembles = (folder / name for name in names)
    figures.energies(chain, ring, energies)
    figures.limits(chain, ring, bosons, limits)
    figures.repair(measurements, repair)
    stored = storage.write({"hydrogen": chain, "ring": ring, "bosons": bosons}, ensembles)
    return [
        (energies, "energies of states and ensembles"),
        (limits, "occupations against their limits"),
        (repair, "the worst noisy density matrix and its repair"),
        (ensembles, stored),
    ]


if __name__ == "__main__":
    main()
