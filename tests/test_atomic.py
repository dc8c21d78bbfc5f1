"""Atomic data against the primary values and against published arithmetic."""

from __future__ import annotations

import math

import pytest
import scipy.constants as si

from fathomline import constants
from fathomline.atomic import alpha_variable, load_atomic_data
from fathomline.errors import AtomicDataError

ATOMS = load_atomic_data()
STRUCTURED = [t for t in ATOMS.transitions if t.structure]


def test_constants_are_codata():
    # scipy.constants carries CODATA; the sets of 2018 and 2022 differ by up to 2e-9
    assert si.c == constants.C_MS
    assert math.isclose(constants.BOLTZMANN, si.k, rel_tol=1e-12)
    assert math.isclose(constants.UNIFIED_MASS, si.atomic_mass, rel_tol=5e-9)
    strength = si.e**2 / (4 * si.epsilon_0 * si.m_e * si.c)  # π e²/(m_e c) in SI, m²/s
    depth = strength * 1e4 * 1e-10 / 1e3 / math.sqrt(math.pi)
    assert math.isclose(constants.DEPTH_CONSTANT, depth, rel_tol=5e-9)


def test_every_row_of_the_tables_is_loaded_with_its_source():
    # counts: README of the reference tables
    assert len(ATOMS.transitions) == 54
    assert len(ATOMS.extra_lines) == 143
    assert len(STRUCTURED) == 48
    assert sum(len(t.structure) for t in STRUCTURED) == 200
    assert len(ATOMS.isotopes) == 38
    assert len(ATOMS.telluric) == 13
    for t in ATOMS.transitions:
        assert t.sources["wavenumber"], t.name
        assert t.sources["q"], t.name
        assert t.q is not None


@pytest.mark.parametrize("transition", STRUCTURED, ids=lambda t: t.name)
def test_composite_is_the_weighted_mean_of_its_components(transition):
    total = sum(c.fraction for c in transition.structure)
    assert total == pytest.approx(1.0, abs=6e-4)  # fractions are printed to 1e-4
    mean = sum(c.fraction * c.wavenumber for c in transition.structure) / total
    shift = (mean / transition.wavenumber - 1.0) * si.c
    # stated in the README of the tables: 4.2 m/s for Fe I 2719 (printed to 0.001 cm⁻¹), else 0.5
    assert abs(shift) < (4.3 if transition.ion == "Fe I" else 0.5)


def test_laboratory_values_of_the_primary_papers():
    # Hannemann et al. 2006, PRA 74, 012505: 24Mg I 49346.756809(35) cm⁻¹
    mg24 = next(c for c in ATOMS["Mg I 2026"].structure if c.mass_number == 24)
    assert mg24.wavenumber == pytest.approx(49346.756809, abs=3.5e-5)
    # Salumbides et al. 2006, MNRAS 373, L41: composite 35051.2808(2) cm⁻¹
    assert ATOMS["Mg I 2852"].wavenumber == pytest.approx(35051.2808, abs=2e-4)
    # Wolf et al. 2008/2009: 40Ca+ 761905012.7(0.5) and 755222766.2(1.7) MHz
    for label, frequency in (("3934", 761905012.7e6), ("3969", 755222766.2e6)):
        ca40 = next(c for c in ATOMS[f"Ca II {label}"].structure if c.mass_number == 40)
        assert ca40.wavenumber * si.c * 100.0 == pytest.approx(frequency, abs=3e6)
    # Fe II 1608.45081(7) Å, abstract of the primary paper quoted by Murphy & Berengut 2014
    assert ATOMS["Fe II 1608"].wavelength == pytest.approx(1608.45081, abs=7e-5)


# Shift in m/s of a line for Δα/α = +10 ppm, −2 c q/ω0 · 1e-5, for the wavelengths and q used with
# King et al. 2012, computed to 1 mm/s: (λ Å, q cm⁻¹, shift)
KING_SHIFTS = {
    "Mg I 2852": (2852.962797, 90, -15.395),
    "Mg II 2796": (2796.353786, 212, -35.545),
    "Mg II 2803": (2803.530982, 121, -20.340),
    "Fe II 1608": (1608.450852, -1165, 112.353),
    "Fe II 1611": (1611.200369, 1330, -128.485),
    "Fe II 2260": (2260.779108, 1435, -194.518),
    "Fe II 2344": (2344.212747, 1375, -193.264),
    "Fe II 2374": (2374.460064, 1625, -231.350),
    "Fe II 2382": (2382.763995, 1505, -215.015),
    "Fe II 2586": (2586.649312, 1515, -234.964),
    "Fe II 2600": (2600.172114, 1370, -213.586),
    "Al II 1670": (1670.788610, 270, -27.048),
    "Al III 1862": (1862.780325, 224, -25.018),
    "Si II 1526": (1526.707631, 47, -4.302),
    "Si II 1808": (1808.013169, 526, -57.021),
    "Mn II 2576": (2576.891087, 1276, -197.150),
    "Mn II 2594": (2594.512258, 1030, -160.230),
    "Mn II 2606": (2606.435597, 869, -135.806),
    "Ni II 1709": (1709.604020, -20, 2.050),
    "Ni II 1741": (1741.552890, -1400, 146.189),
    "Ni II 1751": (1751.915490, -700, 73.530),
}


@pytest.mark.parametrize("name", KING_SHIFTS)
def test_shift_by_alpha_against_published_coefficients(name):
    _, q, shift = KING_SHIFTS[name]
    transition = ATOMS[name]
    assert transition.q == q  # these q did not change since
    assert transition.sensitivity is not None
    # wavelengths were remeasured by up to 30 mÅ in the meantime: 1e-5 of the shift
    assert transition.sensitivity * 10.0 == pytest.approx(shift, abs=0.003)
    # the exact shift differs from the linear rule by less than x² terms: 3e-5 of it
    assert transition.velocity_shift(10.0) == pytest.approx(shift, abs=0.012)


def test_two_line_values():
    # Δα/α of a relative shift of 100 m/s: (pair, ppm), two-line values from the same source
    for first, second, ppm in (
        ("Fe II 2344", "Mg II 2796", 6.340),
        ("Fe II 2382", "Mg II 2796", 5.572),
        ("Fe II 2600", "Mg II 2803", 5.175),
        ("Fe II 1608", "Fe II 2382", 3.055),
        ("Fe II 1608", "Al II 1670", 7.174),
    ):
        difference = (ATOMS[first].sensitivity or 0) - (ATOMS[second].sensitivity or 0)
        assert abs(100.0 / difference) == pytest.approx(ppm, abs=2e-3)


def test_alpha_variable_is_exact():
    # x = (α/α0)² − 1 with α/α0 = 1.01 → 0.0201 exactly
    assert alpha_variable(1e4) == pytest.approx(0.0201, rel=1e-14)


def test_lookup_by_wavelength_sensitivity_and_ion():
    # Fe II 2586 at z = 1.15 falls at 5561.3 Å
    found = ATOMS.find(wavelength=(5550.0, 5570.0), redshift=1.15)
    assert [t.name for t in found] == ["Fe II 2586"]
    strong = ATOMS.find(min_sensitivity=20.0, ion="Fe II")
    assert {"Fe II 2382", "Fe II 2374", "Fe II 2600"} <= {t.name for t in strong}
    assert "Fe II 1608" not in {t.name for t in strong}  # 11.2 m/s per ppm
    assert ATOMS["C IV 1548"].name == "C IV 1548"
    assert ATOMS.isotopes_of("Mg")[0].abundance == 0.7899  # Rosman & Taylor 1998
    bands = {r.molecule for r in ATOMS.telluric_overlap((6870.0, 6900.0))}
    assert bands == {"O2"}  # Fraunhofer B


def test_composite_tables_have_no_structure():
    composite = load_atomic_data("composite")
    assert all(len(t.components) == 1 for t in composite.transitions)
    assert composite["Mg II 2796"].components[0].wavenumber == ATOMS["Mg II 2796"].wavenumber


def test_unknown_transition_names_the_nearest():
    with pytest.raises(AtomicDataError, match=r"did you mean .*Fe II 2382"):
        ATOMS["Fe II 2383"]


@pytest.mark.parametrize(
    ("file", "text", "message"),
    [
        ("transitions", "ion,transition\nFe II,2382\n", r"transitions.ecsv:2: missing column"),
        ("transitions", "", r"transitions.ecsv: the table is empty"),
        (
            "isotopes",
            "element,mass_number,mass,abundance,source\nMg,24,abc,0.7,x\n",
            r"isotopes.ecsv:3: column 'mass': expected a number, found 'abc'",
        ),
        (
            "telluric",
            "wave_min,wave_max,molecule,strength\n1,2,O2\n",
            r"telluric.ecsv:3: expected 4 fields, found 3",
        ),
    ],
)
def test_broken_tables_name_file_and_line(tmp_path, file, text, message):
    from fathomline.atomic.tables import built_in_folder

    for path in built_in_folder().glob("*.ecsv"):
        (tmp_path / path.name).write_text(path.read_text(encoding="utf-8"), encoding="utf-8")
    (tmp_path / f"{file}.ecsv").write_text(
        "# delimiter: ','\n" + text if text else "", encoding="utf-8"
    )
    with pytest.raises(AtomicDataError, match=message):
        load_atomic_data(folder=tmp_path)


def test_missing_table(tmp_path):
    with pytest.raises(AtomicDataError, match=r"structure.ecsv: transition table not found"):
        load_atomic_data(folder=tmp_path)
