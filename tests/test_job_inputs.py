"""Changed atomic data, excluded wavelengths, profiles and distortion tables of a job."""

from __future__ import annotations

import json
import shutil

import numpy as np
import pytest

from fathomline.atomic import load_atomic_data, with_abundances
from fathomline.atomic.tables import built_in_folder
from fathomline.cli.main import run
from fathomline.errors import AtomicDataError, JobError
from fathomline.job import parse_job
from fathomline.job.demo import demo_text, write_demo
from fathomline.job.inputs import distortion_bases, load_atoms, load_spectrum
from fathomline.job.measurement import measure
from fathomline.spectra import GaussianLineSpread, TabulatedLineSpread


def job_with(extra: str, folder=None):
    path = "x.toml" if folder is None else folder / "x.toml"
    return parse_job(demo_text() + extra, path, check_files=False)


def test_overridden_numbers_and_their_record(tmp_path):
    job = write_demo(tmp_path / "d")
    job.write_text(
        demo_text()
        + '\n[[atomic.override]]\ntransition = "Fe II 2382"\nq = 1400.0\nf = 0.33\n'
        + '\n[[atomic.override]]\ntransition = "Mg II 2796"\nwavenumber = 35760.86\n',
        encoding="utf-8",
    )
    atoms = load_atoms(parse_job(job.read_text(encoding="utf-8"), job))
    table = load_atomic_data()
    assert atoms["Fe II 2382"].q == 1400.0
    assert atoms["Fe II 2382"].f == 0.33
    assert atoms["Fe II 2600"] == table["Fe II 2600"]
    # the components keep their distances from the composite
    moved = [
        new.wavenumber - old.wavenumber
        for new, old in zip(
            atoms["Mg II 2796"].components, table["Mg II 2796"].components, strict=True
        )
    ]
    np.testing.assert_allclose(moved, 35760.86 - table["Mg II 2796"].wavenumber, atol=1e-9)
    assert run(["measure", str(job)]) == 0
    record = json.loads((tmp_path / "d/halden-a.result/run.json").read_text(encoding="utf-8"))
    changes = record["atomic_data"]["changes"]
    assert changes == [
        "Fe II 2382: f 0.32 replaced by 0.33",
        "Fe II 2382: q 1505.0 replaced by 1400.0",
        "Mg II 2796: wavenumber 35760.85414 replaced by 35760.86",
    ]
    page = (tmp_path / "d/halden-a.result/report.html").read_text(encoding="utf-8")
    assert all(change in page for change in changes)


def test_one_isotope_and_other_mixtures():
    atoms = load_atomic_data()
    pure = with_abundances(atoms, {"Mg": "24"})["Mg II 2796"]
    # 24Mg II 2796 of Batteiger et al. 2009, PRA 80, 022503: 35760.8373967 cm⁻¹
    assert pure.wavenumber == pytest.approx(35760.8373967, abs=1e-7)
    assert [c.mass_number for c in pure.components] == [24]
    terrestrial = with_abundances(atoms, {"Mg": {"24": 0.7899, "25": 0.1, "26": 0.1101}})
    for new, old in zip(
        terrestrial["Mg II 2803"].components, atoms["Mg II 2803"].components, strict=True
    ):
        assert new.fraction == pytest.approx(old.fraction, abs=1e-4)  # printed to 1e-4
    assert with_abundances(atoms, {"Mg": "terrestrial"}) is atoms
    with pytest.raises(AtomicDataError, match="no components of mass number 23"):
        with_abundances(atoms, {"Mg": "23"})
    with pytest.raises(AtomicDataError, match="no transition of it has isotopic components"):
        with_abundances(load_atomic_data("composite"), {"Mg": "24"})


@pytest.mark.parametrize(
    ("extra", "message"),
    [
        ('[atomic]\nabundances = { Mg = "23" }\n', r"x.toml:\d+: .*mass number 23"),
        ('[[atomic.override]]\ntransition = "Fe II 1"\nf = 0.1\n', r"x.toml:\d+: .*no transition"),
    ],
)
def test_changes_that_fit_nothing(extra, message):
    with pytest.raises(JobError, match=message):
        load_atoms(job_with("\n" + extra))


def test_own_tables(tmp_path):
    own = tmp_path / "mine"
    shutil.copytree(built_in_folder(), own)
    path = own / "transitions.ecsv"
    path.write_text(path.read_text(encoding="utf-8").replace(",0.320,", ",0.321,"), "utf-8")
    atoms = load_atoms(job_with('\n[atomic]\nfolder = "mine"\n', tmp_path))
    assert atoms["Fe II 2382"].f == 0.321
    path.write_text("ion\n", encoding="utf-8")
    broken = tmp_path / "broken"
    shutil.copytree(own, broken)
    with pytest.raises(JobError, match=r"x.toml:\d+: transitions.ecsv:1: missing column"):
        load_atoms(job_with('\n[atomic]\nfolder = "broken"\n', tmp_path))


def test_excluded_wavelengths_are_masked(tmp_path):
    job_file = write_demo(tmp_path / "d")
    text = demo_text().replace('id = "red"', 'id = "red"\nexclude = [[5124.0, 5125.0]]')
    spectrum = load_spectrum(parse_job(text, job_file), 0)
    inside = (spectrum.wavelength >= 5124.0) & (spectrum.wavelength <= 5125.0)
    assert inside.any()
    assert not spectrum.good[inside].any()
    assert spectrum.good[~inside].all()


def test_a_tabulated_gaussian_is_a_gaussian(tmp_path):
    """The same Δα/α with the Gaussian as a formula and as a table of its values."""
    job_file = write_demo(tmp_path / "d")
    sigma = GaussianLineSpread(5.2).sigma
    v = np.linspace(-16.0, 16.0, 129)
    rows = "\n".join(f"{x:.4f},{np.exp(-0.5 * (x / sigma) ** 2):.8e}" for x in v)
    (tmp_path / "d/lsf.csv").write_text(f"velocity,profile\n{rows}\n", encoding="utf-8")
    first = measure(parse_job(demo_text(), job_file))
    text = demo_text().replace("{ fwhm = 5.2 }", '{ table = "lsf.csv" }')
    second = measure(parse_job(text, job_file))
    assert isinstance(second.built.spectra[0].lsf, TabulatedLineSpread)
    assert second.dalpha == pytest.approx(first.dalpha, abs=0.01 * first.stat)
    assert second.stat == pytest.approx(first.stat, rel=1e-3)


def test_distortion_terms_by_their_definition(tmp_path):
    (tmp_path / "shifts.csv").write_text("wavelength,velocity\n5000,100\n6000,-50\n", "utf-8")
    job = job_with(
        """
[[distortion]]
spectrum = "red"
kind = "shift"
value = 3.0

[[distortion]]
spectrum = "red"
kind = "slope"
pivot = 5500.0
value = 1.0

[[distortion]]
spectrum = "red"
kind = "sawtooth"
pivot = 5000.0
order_spacing = 100.0
value = 1.0

[[distortion]]
spectrum = "red"
kind = "table"
file = "shifts.csv"
""",
        tmp_path,
    )
    shift, slope, sawtooth, table = (b(np.array([5025.0, 5600.0])) for b in distortion_bases(job))
    np.testing.assert_allclose(shift, [1.0, 1.0])
    np.testing.assert_allclose(slope, [-0.475, 0.1])
    np.testing.assert_allclose(sawtooth, [-0.5, -1.0])
    np.testing.assert_allclose(table, [96.25, 10.0])
