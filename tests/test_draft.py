"""Drafting a job: what is used, what is left out and why, windows, and the file that is written."""

from __future__ import annotations

import json
import math
import tomllib

import numpy as np
import pytest

from fathomline.atomic import load_atomic_data
from fathomline.cli.main import run
from fathomline.errors import JobError, SpectrumError
from fathomline.job import parse_job
from fathomline.job.draft import draft
from fathomline.job.draft_text import DraftSpectrum, draft_to_toml
from fathomline.job.synthesis import Cloud, synthetic_transmission
from fathomline.spectra import Spectrum, write_spectrum

ATOMS = load_atomic_data()
C_KMS = 299792.458
Z, FWHM, PIXEL = 1.15, 5.0, 2.5
FE_II = ("Fe II 2344", "Fe II 2374", "Fe II 2382", "Fe II 2586", "Fe II 2600")
ABSORBER = [
    (-42.0, 4.5, 12.9, 12.7),
    (-20.0, 3.5, 13.3, 12.9),
    (3.0, 5.0, 13.0, 12.6),
    (24.0, 4.0, 12.8, 12.5),
]


def clouds(shift: float = 0.0) -> list[Cloud]:
    """Invented; manganese is far too weak to be seen."""
    return [
        Cloud(v, {"Fe II": fe + shift, "Mg II": mg + shift, "Mn II": fe + shift - 3.5}, b_turb=b)
        for v, b, fe, mg in ABSORBER
    ]


def spectrum(
    absorbers: list[Cloud],
    *,
    first: float = 4950.0,
    last: float = 6150.0,
    snr: float = 100.0,
    seed: int = 1,
    foreign: tuple[tuple[str, float], ...] = (),
    bad: tuple[tuple[str, float, float], ...] = (),
    name: str = "red",
) -> Spectrum:
    """From the independent simulator.

    `foreign`: transition and velocity of an unrelated Gaussian line of depth 0.3 and 1σ width
    6 km/s; `bad`: transition and velocity range of masked pixels.
    """
    count = math.ceil(C_KMS * math.log(last / first) / PIXEL)
    edges = first * np.exp(np.arange(count + 1) * PIXEL / C_KMS)
    wave = np.sqrt(edges[:-1] * edges[1:])
    flux = np.ones(count)
    ions = {ion for cloud in absorbers for ion in cloud.log_columns}
    for line in ATOMS.find():
        place = line.observed_wavelength(Z)
        if line.ion not in ions or not first < place < last:
            continue
        a, b = np.searchsorted(edges, [place * (1.0 - 3e-3), place * (1.0 + 3e-3)])
        flux[a : b - 1] *= synthetic_transmission(
            edges[a:b], [line], absorbers, redshift=Z, fwhm=FWHM
        )
    for transition, velocity in foreign:
        v = C_KMS * (wave / ATOMS[transition].observed_wavelength(Z) - 1.0) - velocity
        flux *= 1.0 - 0.3 * np.exp(-0.5 * (v / 6.0) ** 2)
    good = np.ones(count, dtype=bool)
    for transition, low, high in bad:
        v = C_KMS * (wave / ATOMS[transition].observed_wavelength(Z) - 1.0)
        good &= (v < low) | (v > high)
    flux = flux + np.random.default_rng(seed).standard_normal(count) / snr
    return Spectrum.from_arrays(
        wave, flux, np.full(count, 1.0 / snr), np.ones(count), good=good, name=name
    )


def drafted(*spectra: Spectrum, **more):
    return draft(spectra, ATOMS, Z, fwhm=FWHM, **more)


@pytest.fixture(scope="module")
def plain():
    return drafted(spectrum(clouds()))


def test_detected_lines_are_used_and_absent_ones_are_not(plain):
    used = {c.transition.name for c in plain.used}
    assert used == {*FE_II, "Mg II 2796", "Mg II 2803"}
    for candidate in plain.candidates:
        assert candidate.reason
        assert candidate.used == (candidate.window is not None)
        if candidate.transition.ion == "Mn II":
            assert candidate.reason.startswith(("not detected", "too weak"))


def test_lines_outside_the_spectrum_are_not_covered(plain):
    # Fe II 1608 falls at 3458 Å, Mg I 2852 at 6134 Å
    assert "Fe II 1608" in plain.not_covered
    assert "Mg I 2852" not in plain.not_covered
    with pytest.raises(KeyError):
        plain["Fe II 1608"]


def test_windows_hold_the_absorption_and_continuum_on_both_sides(plain):
    low, high = plain.extent
    # from the outer components, less or more a line's width and a bin
    assert -65.0 < low < -45.0
    assert 27.0 < high < 47.0
    for candidate in plain.used:
        assert candidate.window == pytest.approx((low - 60.0, high + 60.0), abs=0.11)
        assert candidate.exclude == ()


def test_significance_is_that_of_a_matched_filter(plain):
    # the noise-free profile, fitted together with a straight continuum to the same pixels
    for name in ("Fe II 2374", "Fe II 2586"):
        line = ATOMS[name]
        low, high = (v + s for v, s in zip(plain.extent, (-120.0, 120.0), strict=True))
        edges = line.observed_wavelength(Z) * np.exp(np.arange(low, high, PIXEL) / C_KMS)
        depth = 1.0 - synthetic_transmission(edges, [line], clouds(), redshift=Z, fwhm=FWHM)
        x = np.linspace(-1.0, 1.0, depth.size)
        basis = 100.0 * np.vstack((depth, np.ones_like(x), x)).T
        expected = 1.0 / math.sqrt(np.linalg.inv(basis.T @ basis)[0, 0])
        # bins of 5 km/s and the noise of the template lose some; one σ of chance
        assert plain[name].significance == pytest.approx(expected, rel=0.12, abs=2.0)


@pytest.mark.parametrize("shift", [-1.5, -1.0, -0.5, 0.0])
def test_weak_absorbers_lose_their_weak_lines_first(shift):
    result = drafted(spectrum(clouds(shift), seed=3))
    used = [c for c in result.used if c.transition.ion == "Fe II"]
    out = [c for c in result.candidates if c.transition.name in FE_II and not c.used]
    assert result["Mg II 2796"].used
    for a in used:
        for b in out:
            assert a.transition.f > b.transition.f
    if shift == -1.5:
        assert not result["Fe II 2374"].used
    if shift == 0.0:
        assert not out


def test_noise_alone_is_not_detected():
    used = 0
    for seed in range(10):
        result = drafted(spectrum([], seed=seed))
        used += len(result.used)
    assert used <= 1  # some forty lines each at 5σ, the place of the absorption free
    with pytest.raises(JobError, match="can be used"):
        draft_to_toml(
            drafted(spectrum([], seed=0)), [DraftSpectrum("red", "red.fits", fwhm=5.0)], name="x"
        )


def test_a_blend_inside_the_profile_is_excluded():
    result = drafted(spectrum(clouds(), foreign=(("Fe II 2586", 35.0),)))
    candidate = result["Fe II 2586"]
    assert candidate.used
    assert any(low < 30.0 and high > 40.0 for low, high in candidate.exclude)
    assert any("excess" in note for note in candidate.notes)
    for name in (*FE_II, "Mg II 2796", "Mg II 2803"):
        if name != "Fe II 2586":
            assert result[name].exclude == (), name


def test_a_blend_over_the_profile_removes_the_line():
    places = tuple(("Fe II 2374", float(v)) for v in range(-50, 40, 12))
    candidate = drafted(spectrum(clouds(), foreign=places))["Fe II 2374"]
    assert not candidate.used
    assert candidate.reason.startswith(("blended", "deeper"))


def test_unrelated_absorption_beside_the_profile_ends_the_window(plain):
    result = drafted(spectrum(clouds(), foreign=(("Fe II 2600", 85.0),)))
    low, high = result["Fe II 2600"].window
    assert result.extent[1] + 20.0 < high < 75.0
    assert low == plain["Fe II 2600"].window[0]
    assert result["Fe II 2382"].window == plain["Fe II 2382"].window


def test_saturated_lines_are_left_out_where_others_measure():
    heavy = [Cloud(v, {"Fe II": fe, "Mg II": mg + 2.5}, b_turb=b) for v, b, fe, mg in ABSORBER]
    result = drafted(spectrum(heavy))
    for name in ("Mg II 2796", "Mg II 2803"):
        assert not result[name].used
        assert result[name].reason.startswith("saturated")
    assert result["Fe II 2374"].used


def test_saturated_lines_are_used_where_nothing_else_is():
    heavy = [Cloud(v, {"Mg II": mg + 2.5}, b_turb=b) for v, b, _, mg in ABSORBER]
    result = drafted(spectrum(heavy))
    assert {c.transition.name for c in result.used} == {"Mg II 2796", "Mg II 2803"}
    assert all(any("saturated" in note for note in c.notes) for c in result.used)


def test_masked_pixels():
    result = drafted(
        spectrum(
            clouds(),
            bad=(
                ("Fe II 2382", -60.0, 20.0),  # most of the absorption
                ("Fe II 2586", 80.0, 140.0),  # continuum
                ("Mg II 2803", -200.0, 200.0),  # everything
            ),
        )
    )
    assert not result["Fe II 2382"].used
    assert "bad pixels" in result["Fe II 2382"].reason
    assert not result["Mg II 2803"].used
    assert "gap" in result["Mg II 2803"].reason
    assert result["Fe II 2586"].used
    assert result["Fe II 2586"].window[1] <= 80.0 + 0.5 * PIXEL  # the edge of the first one
    assert any("gap" in note for note in result["Fe II 2586"].notes)


def test_lines_of_other_redshifts_are_predicted_from_their_other_lines():
    # Mg II 2796 of another absorber falls on Fe II 2600 at -20 km/s, its 2803 is free
    other = ATOMS["Fe II 2600"].wavelength * (1 + Z) / ATOMS["Mg II 2796"].wavelength - 1.0
    stranger = [Cloud(-20.0, {"Mg II": 12.8}, b_turb=6.0, redshift=other)]
    lines = spectrum(clouds())
    wave = lines.wavelength
    edges = np.append(lines.bounds()[0], lines.bounds()[1][-1])
    flux = lines.flux.copy()
    for name in ("Mg II 2796", "Mg II 2803"):
        place = ATOMS[name].observed_wavelength(other)
        a, b = np.searchsorted(wave, [place * (1.0 - 1e-3), place * (1.0 + 1e-3)])
        flux[a:b] *= synthetic_transmission(
            edges[a : b + 1], [ATOMS[name]], stranger, redshift=other, fwhm=FWHM
        )
    data = Spectrum.from_arrays(wave, flux, lines.error, np.ones(flux.size), name="red")
    result = drafted(data, other_redshifts=[other])
    candidate = result["Fe II 2600"]
    assert candidate.used == any(low < -20.0 < high for low, high in candidate.exclude)
    assert any("Mg II 2796 of z" in text for text in (candidate.reason, *candidate.notes))


def test_several_spectra_share_the_work():
    blue = spectrum(clouds(), last=5200.0, name="blue", seed=5)
    red = spectrum(clouds(), first=5100.0, name="red", seed=6)
    result = drafted(blue, red)
    assert result["Fe II 2344"].spectra == ("blue",)
    assert result["Fe II 2382"].spectra == ("blue", "red")
    assert result["Mg II 2796"].spectra == ("red",)
    # two spectra of equal noise: √2 of the signal-to-noise ratio of one
    assert result["Fe II 2382"].signal_to_noise == pytest.approx(141.4, rel=0.01)
    tables = [DraftSpectrum("blue", "b.fits", fwhm=5.0), DraftSpectrum("red", "r.fits", R=6e4)]
    data = tomllib.loads(draft_to_toml(result, tables, name="two"))
    regions = {region["transition"]: region.get("spectra") for region in data["region"]}
    assert regions["Fe II 2344"] == ["blue"]
    assert regions["Fe II 2382"] is None
    with pytest.raises(JobError, match="'red'"):
        draft_to_toml(result, tables[:1], name="two")


def test_windows_of_neighbouring_lines_do_not_overlap():
    # Zn II 2062 lies 62 km/s from Cr II 2062
    gas = [Cloud(0.0, {"Zn II": 13.0, "Cr II": 13.3}, b_turb=4.0)]
    result = drafted(spectrum(gas, first=4300.0, last=4500.0, snr=150.0))
    a, b = result["Cr II 2062"], result["Zn II 2062"]
    assert a.used
    assert b.used
    low = b.observed * (1.0 + b.window[0] / C_KMS)
    high = a.observed * (1.0 + a.window[1] / C_KMS)
    assert high < low


def test_text_has_every_decision_and_is_a_job(plain):
    table = DraftSpectrum("red", 'odd "name".fits', fwhm=5.2, reading={"medium": "vacuum"})
    text = draft_to_toml(plain, [table], name='A "quoted" name')
    for candidate in plain.candidates:
        assert f"{candidate.transition.name} at {candidate.observed:.2f} Å" in text
    assert max(map(len, text.splitlines())) <= 100
    data = tomllib.loads(text)
    assert data["structure"] == {"search": True}
    assert "component" not in data
    body = text.partition("[structure]")[0]
    body += '[[component]]\nvelocity = 0.0\nb = 5.0\nlogN = { "Fe II" = 13.0, "Mg II" = 13.0 }\n'
    job = parse_job(body, "draft.toml", check_files=False)
    assert job.absorber.redshift == Z
    assert job.absorber.name == 'A "quoted" name'
    assert job.spectra[0].file == 'odd "name".fits'
    assert [(r.transition, r.window) for r in job.regions] == [
        (c.transition.name, c.window) for c in plain.used
    ]


def test_resolution_is_needed_in_the_text(plain):
    with pytest.raises(JobError, match="resolution"):
        draft_to_toml(plain, [DraftSpectrum("red", "red.fits")], name="x")


@pytest.mark.parametrize(
    ("more", "message"),
    [({"fwhm": 0.0}, "fwhm"), ({"max_velocity": 1.0}, "max_velocity")],
)
def test_numbers_out_of_range(more, message):
    data = spectrum([], last=5000.0)
    with pytest.raises(SpectrumError, match=message):
        draft([data], ATOMS, Z, **{"fwhm": 5.0, **more})


def test_the_absorber_is_no_other_absorber():
    with pytest.raises(SpectrumError, match="absorber itself"):
        drafted(spectrum([], last=5000.0), other_redshifts=[Z + 1e-4])


def test_a_noisy_spectrum_still_gives_its_strong_lines():
    result = drafted(spectrum(clouds(), snr=10.0, seed=4))
    # the strongest are dark to within the noise at -20 km/s, where the optical depth is 6
    assert {"Fe II 2344", "Fe II 2586", "Mg II 2803"} <= {c.transition.name for c in result.used}
    assert not result["Fe II 2382"].used
    assert result["Fe II 2382"].reason.startswith("saturated")
    assert -65.0 < result.extent[0] < -35.0
    assert 15.0 < result.extent[1] < 47.0


def test_a_spectrum_without_continuum():
    data = spectrum(clouds())
    slope = 37.0 * (1.0 + 0.2 * np.sin(data.wavelength / 40.0))
    raw = Spectrum.from_arrays(data.wavelength, data.flux * slope, data.error * slope, name="raw")
    used = {c.transition.name for c in drafted(raw).used}
    assert used == {*FE_II, "Mg II 2796", "Mg II 2803"}


def test_spectra_need_different_names():
    data = spectrum([], last=5000.0)
    with pytest.raises(SpectrumError, match="different names"):
        drafted(data, data)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    path = tmp_path_factory.mktemp("draft")
    (path / "data").mkdir()
    write_spectrum(spectrum(clouds()), path / "data" / "red arm.fits")
    return path


def arguments(folder, *more):
    return ["draft", str(folder / "data" / "red arm.fits"), "--redshift", str(Z), *more]


def test_command_writes_a_job_and_prints_decisions(folder, capsys):
    job = folder / "a.toml"
    assert run(arguments(folder, "--fwhm", "5", "-o", str(job), "--name", "Invented")) == 0
    out = capsys.readouterr().out
    assert "Fe II 2382" in out
    assert "leave out" in out
    data = tomllib.loads(job.read_text(encoding="utf-8"))
    assert data["absorber"]["name"] == "Invented"
    assert data["spectrum"][0]["id"] == "red-arm"
    assert data["spectrum"][0]["file"] == "data/red arm.fits"
    assert data["spectrum"][0]["resolution"] == {"fwhm": 5.0}


def test_command_never_overwrites(folder, capsys):
    job = folder / "there.toml"
    job.write_text("mine", encoding="utf-8")
    assert run(arguments(folder, "--fwhm", "5", "-o", str(job))) == 2
    assert "not overwritten" in capsys.readouterr().err
    assert job.read_text(encoding="utf-8") == "mine"


def test_command_wants_a_resolution(folder, capsys):
    assert run(arguments(folder, "-o", str(folder / "b.toml"))) == 2
    assert "line-spread" in " ".join(capsys.readouterr().err.split())
    assert not (folder / "b.toml").exists()


def test_command_prints_json(folder, capsys):
    job = folder / "c.toml"
    more = ("--resolving-power", "60000", "-o", str(job), "--json", "--other-redshift", "0.9")
    assert run(arguments(folder, *more)) == 0
    record = json.loads(capsys.readouterr().out)
    used = {row["transition"] for row in record["transitions"] if row["used"]}
    assert {*FE_II, "Mg II 2796", "Mg II 2803"} == used
    assert tomllib.loads(job.read_text(encoding="utf-8"))["spectrum"][0]["resolution"] == {
        "R": 60000.0
    }


def test_command_without_absorption_writes_nothing(folder, capsys):
    job = folder / "none.toml"
    write_spectrum(spectrum([], last=5000.0), folder / "empty.fits")
    command = ["draft", str(folder / "empty.fits"), "--redshift", str(Z), "--fwhm", "5"]
    assert run([*command, "-o", str(job)]) == 2
    assert "no job was written" in capsys.readouterr().err
    assert not job.exists()
