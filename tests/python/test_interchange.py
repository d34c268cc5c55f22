"""Integrals and density matrices survive a stay in a file; what a format cannot hold is refused."""
# ruff: noqa: PLC0415

import builtins
import pickle

import numpy as np
import pytest

import fockhull as fh
from fockhull.errors import ArgumentError, ArgumentTypeError
from fockhull.interchange import (
    DensityMatrix,
    Integrals,
    read_density_matrix,
    read_integrals,
    write_density_matrix,
    write_integrals,
)
from hydrogen_integrals import hydrogen_integrals

EVERY_FORMAT = ["file.npz", "file.nc", "file.h5"]
COMPLEX_FORMATS = ["file.npz", "file.nc"]


@pytest.fixture(autouse=True)
def libraries():
    for name in ("xarray", "h5netcdf", "trexio"):
        pytest.importorskip(name)


@pytest.fixture(scope="module")
def hydrogen():
    """Four hydrogen atoms at uneven distances: no symmetry hides a wrong index order."""
    one_body, two_body, repulsion = hydrogen_integrals([0.0, 1.4, 3.3, 5.1])
    return Integrals(one_body, two_body, order="mulliken", constant=repulsion, particles=(3, 1))


def complex_integrals(d=3, seed=5):
    """Two-body integrals with exactly the symmetries v_pqrs = v_qpsr = conj(v_rspq)."""
    rng = np.random.default_rng(seed)
    h = rng.normal(size=(d, d)) + 1j * rng.normal(size=(d, d))
    v = rng.normal(size=(d,) * 4) + 1j * rng.normal(size=(d,) * 4)
    v = v + v.transpose(1, 0, 3, 2)
    return h + h.conj().T, v + v.conj().transpose(2, 3, 0, 1)


@pytest.mark.parametrize("name", EVERY_FORMAT)
def test_integrals_round_trip(tmp_path, hydrogen, name):
    write_integrals(tmp_path / name, hydrogen)
    back = read_integrals(tmp_path / name)
    np.testing.assert_allclose(back.one_body, hydrogen.one_body, rtol=0, atol=1e-15)
    np.testing.assert_allclose(back.two_body, hydrogen.two_body, rtol=0, atol=1e-15)
    assert (back.constant, back.particles) == (hydrogen.constant, (3, 1))
    assert [path.name for path in tmp_path.iterdir()] == [name], "temporary files were left"
    expected = fh.solve(hydrogen.hamiltonian(), levels=3).energies
    np.testing.assert_allclose(
        fh.solve(back.hamiltonian(), levels=3).energies, expected, atol=1e-12
    )


def test_index_orders_differ_and_are_told_apart(hydrogen):
    assert np.abs(hydrogen.two_body - hydrogen.two_body_mulliken).max() > 0.1
    again = Integrals(hydrogen.one_body, hydrogen.two_body_mulliken, order="mulliken")
    np.testing.assert_array_equal(again.two_body, hydrogen.two_body)
    wrong = Integrals(hydrogen.one_body, hydrogen.two_body, order="mulliken", particles=(3, 1))
    right = fh.solve(hydrogen.hamiltonian(), levels=1).energies - hydrogen.constant
    assert np.abs(fh.solve(wrong.hamiltonian(), levels=1).energies - right) > 1e-3


def test_trexio_stores_dirac_order_as_its_specification_says(tmp_path, hydrogen):
    """TREXIO specification, section on two-electron integrals: <pq|rs>, physicists' notation."""
    import trexio

    write_integrals(tmp_path / "h.h5", hydrogen)
    with trexio.File(str(tmp_path / "h.h5"), "r", trexio.TREXIO_HDF5) as file:
        count = trexio.read_mo_2e_int_eri_size(file)
        indices, values, *_ = trexio.read_mo_2e_int_eri(file, 0, count)
        electrons = trexio.read_electron_num(file)
    mulliken = hydrogen.two_body_mulliken
    for (p, q, r, s), value in zip(indices, values, strict=True):
        assert value == pytest.approx(mulliken[p, r, q, s], abs=1e-15)
    pairs = 4 * 5 // 2
    assert count == pairs * (pairs + 1) // 2  # each class of eight once
    assert electrons == 4


def test_trexio_file_of_another_program_with_all_partners(tmp_path, hydrogen):
    import trexio

    v = hydrogen.two_body
    with trexio.File(str(tmp_path / "h.h5"), "w", trexio.TREXIO_HDF5) as file:
        trexio.write_mo_num(file, 4)
        trexio.write_mo_1e_int_core_hamiltonian(file, np.array(hydrogen.one_body))
        every_index = np.indices(v.shape).reshape(4, -1).T
        trexio.write_mo_2e_int_eri(file, 0, v.size, every_index, np.array(v).ravel())
    back = read_integrals(tmp_path / "h.h5")
    np.testing.assert_allclose(back.two_body, v, rtol=0, atol=1e-15)
    assert back.constant == 0.0
    with pytest.raises(ArgumentError, match="without numbers of particles"):
        back.hamiltonian()


@pytest.mark.parametrize("name", COMPLEX_FORMATS)
def test_complex_integrals_round_trip(tmp_path, name):
    h, v = complex_integrals()
    one_body = np.stack([h, h.conj()])  # spins differ
    write_integrals(tmp_path / name, Integrals(one_body, v, order="dirac"))
    back = read_integrals(tmp_path / name)
    assert back.one_body.dtype == back.two_body.dtype == np.complex128
    np.testing.assert_array_equal(back.one_body, one_body)
    np.testing.assert_allclose(back.two_body, v, rtol=0, atol=1e-15)
    assert back.particles is None


def test_trexio_keeps_complex_hopping_and_refuses_the_rest(tmp_path):
    h, v = complex_integrals()
    path = tmp_path / "file.h5"
    write_integrals(path, Integrals(h))
    np.testing.assert_array_equal(read_integrals(path).one_body, h)
    assert read_integrals(path).two_body is None
    real = np.array([[0.0, 1.0], [1.0, 0.5]])
    fourfold = np.zeros((2, 2, 2, 2))
    fourfold[0, 1, 1, 0] = fourfold[1, 0, 0, 1] = 1.0  # without <10|..|01> -> <00|..|11>
    for refused, message in [
        (Integrals(h, v, order="dirac"), "complex two-body"),
        (Integrals(real, fourfold, order="dirac"), "eightfold"),
        (Integrals(np.stack([real, -real])), "differ between the spins"),
    ]:
        with pytest.raises(ArgumentError, match=message):
            write_integrals(path, refused, overwrite=True)
    np.testing.assert_array_equal(read_integrals(path).one_body, h)  # the old file is still there


def test_integrals_of_a_hamiltonian_in_every_form():
    sector = fh.SpinHalfFermions(3, (2, 1))
    rng = np.random.default_rng(2)
    v = rng.normal(size=(3,) * 4)
    v = v + v.transpose(1, 0, 3, 2)
    v = v + v.transpose(2, 3, 0, 1)
    interaction = (
        fh.Interaction(sector, density_density=fh.couplings.on_site(3, [1.0, 2.0, 3.0]))
        + fh.Interaction(sector, two_body=v, order="dirac")
        + fh.Interaction(sector, entries=fh.couplings.pairing(3, 0.3))
    )
    hamiltonian = fh.Hamiltonian(fh.lattices.ring(3, flux=0.4), interaction, constant=0.7)
    rebuilt = Integrals.of(hamiltonian).hamiltonian()
    assert rebuilt.sector == sector
    np.testing.assert_allclose(
        rebuilt.to_scipy().toarray(), hamiltonian.to_scipy().toarray(), atol=1e-13
    )
    bosons = fh.Hamiltonian(fh.lattices.chain(3), sector=fh.Bosons(3, 2))
    assert Integrals.of(bosons).particles is None


@pytest.mark.parametrize("name", EVERY_FORMAT)
@pytest.mark.parametrize("domain", ["spin-resolved", "spin-summed"])
def test_density_matrix_round_trip(tmp_path, hydrogen, name, domain):
    gamma = fh.solve(hydrogen.hamiltonian(), [0.6, 0.4]).density_matrix
    gamma = gamma if domain == "spin-resolved" else gamma.sum(axis=0)
    write_density_matrix(tmp_path / name, gamma, domain=domain)
    back = read_density_matrix(tmp_path / name)
    assert back.domain == domain
    np.testing.assert_allclose(back.matrix, gamma, rtol=0, atol=1e-15)


@pytest.mark.parametrize("name", COMPLEX_FORMATS)
def test_complex_spinless_density_matrix_round_trip(tmp_path, name):
    hamiltonian = fh.Hamiltonian(fh.lattices.ring(5, flux=1.0), sector=fh.Fermions(5, 2))
    gamma = fh.solve(hamiltonian, [1.0]).density_matrix
    write_density_matrix(tmp_path / name, gamma, domain="spinless")
    back = read_density_matrix(tmp_path / name)
    assert np.abs(back.matrix.imag).max() > 0.01
    np.testing.assert_allclose(back.matrix, gamma, rtol=0, atol=1e-15)
    for domain, message in [("spinless", "spinless"), ("spin-summed", "complex")]:
        with pytest.raises(ArgumentError, match=message):
            write_density_matrix(tmp_path / "g.h5", gamma, domain=domain)


def test_refusals_name_what_came(tmp_path, hydrogen):
    path = tmp_path / "file.npz"
    write_integrals(path, hydrogen)
    calls = [
        (lambda: write_integrals(path, hydrogen), "does not exist yet"),
        (lambda: write_integrals(tmp_path / "x.dat", hydrogen), r"\.npz"),
        (lambda: write_integrals(tmp_path / "no" / "x.npz", hydrogen), "folder"),
        (lambda: write_integrals(tmp_path / "x", hydrogen, format="text"), "npz, netcdf"),
        (lambda: read_integrals(tmp_path / "x.npz"), "exists"),
        (lambda: read_density_matrix(path), "integrals"),
        (lambda: DensityMatrix(np.eye(2), "spin-resolved"), r"\(2, d, d\)"),
        (lambda: DensityMatrix(np.eye(2), "both"), "spin-summed"),
        (lambda: DensityMatrix([[0, 1], [0, 0]], "spinless"), "Hermit"),
        (lambda: Integrals(np.eye(2), np.zeros((2,) * 4)), "order"),
        (lambda: Integrals(np.eye(2), order="dirac"), "two_body"),
        (lambda: Integrals(np.ones((2, 3))), r"\(d, d\)"),
        (lambda: Integrals(np.eye(2), particles=(-1, 1)), "particles"),
    ]
    for call, message in calls:
        with pytest.raises(ArgumentError, match=message):
            call()
    with pytest.raises(ArgumentTypeError, match=r"Integrals\.of"):
        write_integrals(path, hydrogen.one_body, overwrite=True)
    with pytest.raises(ArgumentTypeError, match="up, down"):
        Integrals(np.eye(2), particles=2)


@pytest.mark.parametrize("name", EVERY_FORMAT)
@pytest.mark.parametrize("read", [read_integrals, read_density_matrix])
def test_files_with_something_else_are_refused(tmp_path, name, read):
    (tmp_path / name).write_bytes(b"not such a file" * 100)
    with pytest.raises(ArgumentError, match="path"):
        read(tmp_path / name)


def test_archives_are_never_unpickled(tmp_path):
    np.savez(tmp_path / "file.npz", content=np.array([{"a": 1}], dtype=object))
    with pytest.raises(ArgumentError, match="npz"):
        read_integrals(tmp_path / "file.npz")


@pytest.mark.parametrize(("name", "library"), [("file.h5", "trexio"), ("file.nc", "h5netcdf")])
def test_missing_library_is_named(tmp_path, monkeypatch, hydrogen, name, library):
    real_import = builtins.__import__

    def without(module, *args, **kwargs):
        if module == library:
            raise ImportError(name=module)
        return real_import(module, *args, **kwargs)

    monkeypatch.setattr(builtins, "__import__", without)
    with pytest.raises(ArgumentError, match=f"{library}.*pip install"):
        write_integrals(tmp_path / name, hydrogen)
    assert not list(tmp_path.iterdir())


def test_integrals_pickle_and_are_immutable(hydrogen):
    again = pickle.loads(pickle.dumps(hydrogen))
    np.testing.assert_array_equal(again.two_body, hydrogen.two_body)
    assert repr(again) == repr(hydrogen)
    with pytest.raises(ValueError, match="read-only"):
        again.two_body[0, 0, 0, 0] = 1.0
    with pytest.raises(AttributeError):
        again.constant = 2.0
