"""The figures: one accent colour, line styles that survive printing in black and white."""

from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from fockhull.plot.look import ACCENT, HATCH, INK, SECOND, SHADE
from noisy_measurement import Measurements
from parameter_sweep import Sweep, leading_limit

ENSEMBLE: dict[str, Any] = {
    "color": "black",
    "lw": 0.8,
    "marker": "o",
    "mfc": "white",
    "ms": 3.6,
    "mew": 0.9,
}
COLOURS = [INK, SECOND, ACCENT]

FloatArray = npt.NDArray[np.float64]

STYLE: Any = {
    "figure.dpi": 100,
    "savefig.dpi": 200,
    "figure.constrained_layout.use": True,
    "figure.constrained_layout.w_pad": 0.11,
    "font.family": "DejaVu Sans",
    "font.size": 9.5,
    "axes.titlesize": 10,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "text.color": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.linewidth": 0.8,
    "lines.linewidth": 1.8,
    "hatch.linewidth": 0.5,
    "hatch.color": HATCH,
    "legend.frameon": False,
}
SPIN_STYLE: Any = {0: "-", 1: (0, (5, 1.6)), 2: (0, (1, 1.2))}
SPIN_NAME = {0: "singlet", 1: "triplet", 2: "quintet"}


def energies(chain: Sweep, ring: Sweep, path: Path) -> None:
    """Energies and excitation energies of the chain, energies of the ring."""
    with rc_context(STYLE):
        figure = Figure(figsize=(11.4, 3.9))
        total, excitation, flux = figure.subplots(1, 3)
        spins = _spins(chain)
        gaps = chain.energies - chain.energies[:, :1]
        for j, colour in enumerate(COLOURS):
            _by_spin(total, chain.values, chain.energies[:, j], spins[:, j], colour)
            if j > 0:
                _by_spin(excitation, chain.values, gaps[:, j], spins[:, j], colour)
        at = chain.nearest(2.4)
        _note(excitation, "$E_3-E_1$", chain.values[at], gaps[at, 2], (5, 3), ha="left")
        _note(excitation, "$E_2-E_1$", chain.values[at], gaps[at, 1], (-5, -12), ha="right")
        _ensemble(total, chain.values, chain.ensemble_energies)
        for j in range(ring.energies.shape[1]):
            flux.plot(ring.values / np.pi, ring.energies[:, j], color=COLOURS[j])
        _ensemble(flux, ring.values / np.pi, ring.ensemble_energies)
        at = ring.nearest(0.4 * np.pi)
        for j, offset in enumerate([(-16, 4), (4, 4)]):
            _note(flux, f"$E_{j + 1}$", ring.values[at] / np.pi, ring.energies[at, j], offset)
        atoms, sites = chain.polytope.sector.modes, ring.polytope.sector.modes
        total.set(title=f"Hydrogen chain of {atoms} atoms", ylabel="energy (hartree)")
        excitation.set(title="Its excitation energies", ylabel="excitation energy (hartree)")
        excitation.set_yscale("log")
        for axes in (total, excitation):
            axes.set_xlabel("bond length (bohr)")
        flux.set(title=f"Ring of {sites} sites", xlabel=r"flux ($\pi$)", ylabel="energy ($t$)")
        _energy_legends(total, excitation, spins)
        _save(figure, path)


def limits(chain: Sweep, ring: Sweep, bosons: Sweep, path: Path) -> None:
    """Largest occupations of the three systems against what the weights allow."""
    electrons = chain.polytope.sector.total_particles
    fermions = ring.polytope.sector.particles
    with rc_context(STYLE):
        figure = Figure(figsize=(11.4, 3.9))
        left, middle, right = figure.subplots(1, 3)
        _against_limit(left, chain, chain.values)
        left.set(title="Hydrogen chain", xlabel="bond length (bohr)")
        left.set_ylabel(f"sum of the {electrons} leading occupations")
        _against_limit(middle, ring, ring.values / np.pi)
        middle.set(title="Fermions on a ring", xlabel=r"flux ($\pi$)")
        middle.set_ylabel(f"sum of the {fermions} leading occupations")
        _against_limit(right, bosons, bosons.values)
        right.set(title="Bosons on a chain", xlabel="repulsion $U$ ($t$)")
        right.set_ylabel("largest occupation $n_1$")
        _save(figure, path)


def repair(batch: Measurements, path: Path) -> None:
    """Occupations of the worst noisy copy, of its repair and of the exact matrix."""
    worst = batch.worst
    noisy = batch.occupations(batch.noisy[worst])
    repaired = batch.repaired.occupations[worst]
    exact = batch.occupations(batch.exact)
    with rc_context(STYLE):
        figure = Figure(figsize=(9.2, 3.9))
        left, right = figure.subplots(1, 2, width_ratios=[1.7, 1])
        modes = noisy.shape[-1]
        position = np.arange(2 * modes) + np.repeat([0.0, 0.8], modes)
        left.plot(position, exact.ravel(), "_", color=INK, ms=20, mew=1.6, label="exact")
        left.plot(position - 0.12, noisy.ravel(), "D", mfc="white", mec=INK, ms=6, label="noisy")
        left.plot(position + 0.12, repaired.ravel(), "o", color=ACCENT, ms=6, label="repaired")
        low, high = left.set_ylim(-0.13, 1.13)
        _forbidden(left, 1.0, high, edge=1.0)
        _forbidden(left, low, 0.0, edge=0.0)
        labels = [f"{k}{arrow}" for arrow in "↑↓" for k in range(1, modes + 1)]
        left.set_xticks(position, labels)
        left.set(
            title="Natural occupations and Pauli's limits",
            xlabel="natural orbital, spin",
            ylabel="occupation",
        )
        left.legend(loc="center right", bbox_to_anchor=(0.5, 0.55))
        _leading_sums(right, batch, worst)
        _save(figure, path)


def _leading_sums(axes: Axes, batch: Measurements, worst: int) -> None:
    """The sum that the weights limit: noisy, after Pauli's principle alone, repaired, exact."""
    sums = {
        "noisy": batch.leading(batch.occupations(batch.noisy[worst])),
        "Pauli\nrestored": batch.leading(batch.pauli.occupations[worst]),
        "repaired": batch.leading(batch.repaired.occupations[worst]),
        "exact": batch.leading(batch.occupations(batch.exact)),
    }
    markers = ["D", "s", "o", "_"]
    faces = ["white", "white", ACCENT, INK]
    limit = leading_limit(batch.polytope.sector, batch.polytope.weights)
    for x, (value, marker, face) in enumerate(zip(sums.values(), markers, faces, strict=True)):
        edge = ACCENT if marker == "o" else INK
        axes.plot(x, value, marker, mfc=face, mec=edge, ms=8 if marker != "_" else 20, mew=1.4)
    top = max(sums.values())
    bottom = min(sums.values())
    margin = 0.35 * (top - bottom)
    axes.set_ylim(bottom - margin, top + margin)
    _forbidden(axes, limit, top + margin, edge=limit)
    axes.set_xlim(-0.6, 3.6)
    _note(axes, f"these weights: {limit:g}", -0.6, limit, (5, -13), ha="left")
    axes.set_xticks(range(4), list(sums))
    axes.set(title="What the weights limit", ylabel="sum of the 4 leading occupations")


def _spins(chain: Sweep) -> npt.NDArray[np.int_]:
    r = chain.energies.shape[1]
    squares = np.array([e.spin_squared[:r] for e in chain.ensembles])
    return np.round(np.sqrt(squares.clip(min=0.0) + 0.25) - 0.5).astype(int)


def _by_spin(
    axes: Axes, x: FloatArray, y: FloatArray, spin: npt.NDArray[np.int_], colour: str
) -> None:
    """Draw a level in pieces, each in the style of its spin."""
    starts = [0, *(np.flatnonzero(np.diff(spin)) + 1), len(x)]
    for a, b in pairwise(starts):
        stop = min(b + 1, len(x))
        axes.plot(x[a:stop], y[a:stop], color=colour, ls=SPIN_STYLE[int(spin[a])])


def _ensemble(axes: Axes, x: FloatArray, y: FloatArray) -> None:
    axes.plot(x, y, **ENSEMBLE, markevery=max(1, len(x) // 24))


def _energy_legends(total: Axes, excitation: Axes, spins: npt.NDArray[np.int_]) -> None:
    lines = [Line2D([], [], color=colour) for colour in COLOURS]
    names = [f"$E_{j}$" for j in range(1, len(COLOURS) + 1)]
    mixture = Line2D([], [], **ENSEMBLE)
    total.legend([*reversed(lines), mixture], [*reversed(names), "ensemble $E_w$"])
    present = [int(s) for s in np.unique(spins)]
    styles = [Line2D([], [], color=INK, ls=SPIN_STYLE[s]) for s in present]
    excitation.legend(styles, [SPIN_NAME[s] for s in present], handlelength=3, loc="lower left")


def _note(axes: Axes, text: str, x: float, y: float, offset: tuple[int, int], **style: Any) -> None:
    """Write next to a point, `offset` in points."""
    note = axes.annotate(text, (x, y), offset, textcoords="offset points", **style)
    note.set_in_layout(False)


def _against_limit(axes: Axes, sweep: Sweep, x: FloatArray) -> None:
    """Draw the leading occupation; open circles where weights were averaged over a level."""
    sector = sweep.polytope.sector
    limit = leading_limit(sector, sweep.polytope.weights)
    particles = sector.total_particles
    values = sweep.leading_occupation
    cut = np.isin(sweep.values, [c.value for c in sweep.cut_levels])
    between = np.where(cut, np.nan, values)
    axes.plot(x, between, color=ACCENT, marker="o", ms=3, lw=1.4, markevery=max(1, len(x) // 30))
    span = particles - values.min()
    top = particles + 0.14 * span
    axes.set_ylim(values.min() - 0.1 * span, top)
    axes.set_xlim(x[0], x[-1])
    _forbidden(axes, limit, top, edge=limit)
    axes.axhline(particles, color=INK, lw=1, ls=(0, (6, 3)))
    _note(axes, f"one state alone: {particles}", x[-1], particles, (-4, 4), ha="right")
    _note(axes, f"these weights: {limit:g}", x[-1], limit, (-4, -13), ha="right")
    if cut.any():
        axes.plot(x[cut], values[cut], "o", mfc="white", mec=ACCENT, ms=5, mew=1.3, clip_on=False)
        middle, text = len(x) // 2, "open: weights averaged\nover a degenerate level"
        _note(axes, text, x[middle], values[middle], (9, -3), ha="left", fontsize=8)


def _forbidden(axes: Axes, low: float, high: float, *, edge: float) -> None:
    """Shade what no ensemble with the weights can have."""
    axes.axhspan(low, high, facecolor=SHADE, hatch="////", edgecolor=HATCH, lw=0, zorder=0)
    axes.axhline(edge, color=INK, lw=1.2, zorder=1)


def _save(figure: Figure, path: Path) -> None:
    figure.savefig(path)
