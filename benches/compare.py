"""Kernels beside SciPy and the machine's own limits, measured in one run.

Prints a table of ratios and writes JSON. Times are the best of several repetitions; only ratios
within one run mean anything. SciPy runs in a process of its own with one and with two BLAS
threads, and the better of both counts. Usage: ``python benches/compare.py [--large] [case ...]``.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import subprocess
import sys
import time
from collections.abc import Callable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1] / "demo"))

import itertools

import fockhull as fh

REPOSITORY = Path(__file__).parents[1]
SEED = 0


@dataclass
class Row:
    """One line of the table."""

    case: str
    ours: float
    reference: float
    what: str
    ratio: float
    target: str


def best(function: Callable[[], Any], repetitions: int = 7) -> float:
    """Least time of several calls, in seconds."""
    times = []
    for _ in range(repetitions):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return min(times)


def ring(sites: int, filling: int) -> fh.Hamiltonian:
    """Spin-1/2 ring, t = 1, U = 4, `filling` particles of each spin."""
    sector = fh.SpinHalfFermions(sites, (filling, filling))
    repulsion = fh.Interaction(sector, density_density=fh.couplings.on_site(sites, 4.0))
    return fh.Hamiltonian(fh.lattices.ring(sites), repulsion)


def spinless_ring() -> fh.Hamiltonian:
    """24 modes, 12 fermions, neighbours repel."""
    h = fh.lattices.ring(24)
    sector = fh.Fermions(24, 12)
    coupling = fh.couplings.nearest_neighbour(24, fh.lattices.bonds_of(h), 2.0)
    return fh.Hamiltonian(h, fh.Interaction(sector, density_density=coupling))


def boson_ring() -> fh.Hamiltonian:
    """12 bosons in 12 modes, repulsion on site."""
    sector = fh.Bosons(12, 12)
    coupling = fh.couplings.on_site(12, 4.0)
    return fh.Hamiltonian(fh.lattices.ring(12), fh.Interaction(sector, density_density=coupling))


def hydrogen(atoms: int) -> fh.Hamiltonian:
    """Chain of hydrogen atoms, minimal basis, dense integrals."""
    from hydrogen_integrals import hydrogen_integrals  # noqa: PLC0415

    integrals = hydrogen_integrals(1.8 * np.arange(atoms))
    sector = fh.SpinHalfFermions(atoms, (atoms // 2, atoms - atoms // 2))
    interaction = fh.Interaction(sector, two_body=integrals.two_body, order="mulliken")
    return fh.Hamiltonian(integrals.one_body, interaction, integrals.nuclear_repulsion)


HAMILTONIANS: dict[str, Callable[[], fh.Hamiltonian]] = {
    "ring12": lambda: ring(12, 6),
    "spinless24": spinless_ring,
    "bosons12": boson_ring,
}


def triad(length: int) -> float:
    """Time of a + s b -> c over vectors of float64, in two threads as rayon would."""
    from concurrent.futures import ThreadPoolExecutor  # noqa: PLC0415

    a, b, c = (np.ones(length) for _ in range(3))
    threads = os.cpu_count() or 1
    edges = np.linspace(0, length, threads + 1).astype(int)
    blocks = [slice(x, y) for x, y in itertools.pairwise(edges)]
    chunk = 1 << 14

    def part(block: slice) -> None:
        for start in range(block.start, block.stop, chunk):
            piece = slice(start, min(start + chunk, block.stop))
            np.multiply(b[piece], 3.0, out=c[piece])
            np.add(c[piece], a[piece], out=c[piece])

    with ThreadPoolExecutor(threads) as pool:
        return best(lambda: list(pool.map(part, blocks)))


def product_rate() -> float:
    """Floating-point operations per second of NumPy's matrix product."""
    a = np.random.default_rng(SEED).normal(size=(2000, 2000))
    return 2 * 2000**3 / best(lambda: a @ a, 5)


def apply_times(hamiltonian: fh.Hamiltonian) -> tuple[float, float]:
    """Times of products with one vector and with a block of eight."""
    n = hamiltonian.dimension
    block = np.asfortranarray(np.random.default_rng(SEED).normal(size=(n, 8)))
    out = np.empty_like(block)
    vector, image = block[:, 0].copy(), np.empty(n)
    one = best(lambda: hamiltonian.apply(vector, out=image), 15)
    eight = best(lambda: hamiltonian.apply(block, out=out), 5)
    return one, eight


def scipy_process(name: str, task: str, threads: int) -> dict[str, Any]:
    """Run SciPy's part of a case in a process of its own."""
    environment = {k: v for k, v in os.environ.items() if k != "OPENBLAS_CORETYPE"}
    environment["OPENBLAS_NUM_THREADS"] = str(threads)
    command = [sys.executable, __file__, "--scipy", name, "--task", task]
    printed = subprocess.run(command, env=environment, capture_output=True, text=True, check=True)
    return dict(json.loads(printed.stdout.splitlines()[-1]))


def scipy_part(name: str, task: str) -> dict[str, Any]:
    """SciPy's times on the stored matrix."""
    from scipy.sparse.linalg import eigsh  # noqa: PLC0415

    matrix = HAMILTONIANS[name]().to_scipy()
    rng = np.random.default_rng(SEED)
    if task == "apply":
        block = rng.normal(size=(matrix.shape[0], 8))
        vector = block[:, 0].copy()
        return {
            "one": best(lambda: matrix @ vector, 15),
            "eight": best(lambda: matrix @ block, 5),
            "bytes": matrix.data.nbytes + matrix.indices.nbytes + matrix.indptr.nbytes,
        }
    levels = int(task.removeprefix("eigsh"))
    start = rng.normal(size=matrix.shape[0])
    begin = time.perf_counter()
    values = eigsh(matrix, k=levels, which="SA", tol=1e-10, v0=start, return_eigenvectors=True)[0]
    return {"seconds": time.perf_counter() - begin, "energies": sorted(values.tolist())}


def scipy_best(name: str, task: str, key: str) -> float:
    """Return the better of one and two BLAS threads."""
    return min(float(scipy_process(name, task, threads)[key]) for threads in (1, 2))


def apply_case(name: str, targets: tuple[str, str]) -> list[Row]:
    """Products against those of SciPy's stored matrix."""
    one, eight = apply_times(HAMILTONIANS[name]())
    theirs = [scipy_process(name, "apply", threads) for threads in (1, 2)]
    csr_one, csr_eight = (min(t[key] for t in theirs) for key in ("one", "eight"))
    return [
        Row(f"{name}: apply, one vector", one, csr_one, "SciPy CSR", csr_one / one, targets[0]),
        Row(
            f"{name}: apply, 8 vectors",
            eight,
            csr_eight,
            "SciPy CSR",
            csr_eight / eight,
            targets[1],
        ),
    ]


def solve_case(weights: list[float], levels: int, target: str) -> Row:
    """Solve of the 12-site ring with gamma, against SciPy's eigsh on the stored matrix."""
    hamiltonian = HAMILTONIANS["ring12"]()
    begin = time.perf_counter()
    ensemble = fh.solve(hamiltonian, weights)
    _ = ensemble.density_matrix
    ours = time.perf_counter() - begin
    theirs = scipy_best("ring12", f"eigsh{levels}", "seconds")
    print(
        "    levels", np.array2string(ensemble.energies, precision=10), "then", ensemble.next_energy
    )
    print(f"    {ensemble.products} products, levels {ensemble.level_count}", flush=True)
    name = f"ring12: solve r = {len(weights)} with gamma"
    return Row(name, ours, theirs, f"eigsh k = {levels}", theirs / ours, target)


def hydrogen_cases(rate: float) -> list[Row]:
    """Dense integrals, in units of NumPy's product rate."""
    begin = time.perf_counter()
    ensemble = fh.solve(hydrogen(10), levels=4)
    _ = ensemble.state_density_matrices
    seconds = time.perf_counter() - begin
    product = 2 * 2000**3 / rate
    chain = hydrogen(12)
    n = chain.dimension
    x, out = np.random.default_rng(SEED).normal(size=n), np.empty(n)
    one = best(lambda: chain.apply(x, out=out), 3)
    pairs = 12 * 13 // 2
    ideal = 2 * pairs**2 * n / rate
    return [
        Row("H10: integrals to r = 4 and gamma", seconds, product, "product of 2000 x 2000",
            seconds / product, "at most 30"),
        Row("H12: apply, share of NumPy's rate", one, ideal, "2 n^2 dim flops", ideal / one,
            "at least 0.30"),
    ]  # fmt: skip


def large_ring_cases() -> list[Row]:
    """The ring of 14 sites against a triad of the same length, and its solve."""
    hamiltonian = ring(14, 7)
    n = hamiltonian.dimension
    x, out = np.random.default_rng(SEED).normal(size=n), np.empty(n)
    limit = triad(n)
    one = best(lambda: hamiltonian.apply(x, out=out), 5)
    begin = time.perf_counter()
    ensemble = fh.solve(hamiltonian, [0.5, 0.3, 0.2], tol=1e-8)
    seconds = time.perf_counter() - begin
    print("    levels", ensemble.energies, ensemble.products, "products", flush=True)
    return [
        Row("ring14: apply", one, limit, "triad", one / limit, "at most 5"),
        Row("ring14: solve r = 3, tol 1e-8", seconds, 300.0, "5 minutes", seconds / 300, "below 1"),
    ]


def largest_ring_case() -> None:
    """Half-filled ring of 16 sites, two states: time and peak memory."""
    hamiltonian = ring(16, 8)
    print(hamiltonian.memory_estimate())
    begin = time.perf_counter()
    ensemble = fh.solve(hamiltonian, [0.6, 0.4], tol=1e-6, progress=print)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    seconds = time.perf_counter() - begin
    print(
        f"{ensemble!r}\n{seconds:.0f} s, peak memory {peak:.1f} GiB, {ensemble.products} products"
    )


def machine() -> str:
    """Name the processor."""
    try:
        lines = Path("/proc/cpuinfo").read_text().splitlines()
        return next(x.split(":")[1].strip() for x in lines if x.startswith("model name"))
    except (OSError, StopIteration):
        return "unknown processor"


def main() -> None:
    """Measure what was asked for and print the table."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("cases", nargs="*", help="ring12, solve, spinless24, bosons12, ...")
    parser.add_argument("--large", action="store_true", help="the ring of 16 sites alone")
    parser.add_argument("--scipy", help=argparse.SUPPRESS)
    parser.add_argument("--task", default="apply", help=argparse.SUPPRESS)
    options = parser.parse_args()
    if options.scipy:
        print(json.dumps(scipy_part(options.scipy, options.task)))
        return
    if options.large:
        largest_ring_case()
        return
    rate = product_rate()
    cases: dict[str, Callable[[], list[Row]]] = {
        "ring12": lambda: apply_case("ring12", ("8", "6")),
        "solve": lambda: [solve_case([0.5, 0.3, 0.2], 4, "12")],
        "solve5": lambda: [solve_case([0.3, 0.25, 0.2, 0.125, 0.125], 5, "12")],
        "spinless24": lambda: apply_case("spinless24", ("4", "")),
        "bosons12": lambda: apply_case("bosons12", ("4", "")),
        "hydrogen": lambda: hydrogen_cases(rate),
        "ring14": large_ring_cases,
    }
    print(f"{machine()}, {os.cpu_count()} cores; NumPy's product {rate / 1e9:.0f} GFlop/s")
    rows: list[Row] = []
    for name in options.cases or cases:
        for row in cases[name]():
            rows.append(row)
            print(f"  {row.case:40} {row.ours:10.4f} s   {row.what} {row.reference:10.4f} s   "
                  f"ratio {row.ratio:6.2f}   wanted {row.target}", flush=True)  # fmt: skip
    folder = REPOSITORY / "bench-results"
    folder.mkdir(exist_ok=True)
    report = {"machine": machine(), "cores": os.cpu_count(), "product_rate": rate}
    target = folder / "compare.json"
    target.write_text(json.dumps(report | {"rows": [asdict(row) for row in rows]}, indent=1))
    print(f"written: {target.relative_to(REPOSITORY)}")


if __name__ == "__main__":
    main()
