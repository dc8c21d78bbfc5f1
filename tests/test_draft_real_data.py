"""Drafts of five absorbers of a real quasar spectrum against a list made by hand.

The folder of the spectra is named by the environment variable FATHOMLINE_REAL_DATA.
Based on observations collected at the European Southern Observatory, public archive, UVES,
2010-06 (programme 185.A-0745).

The lists come with the spectrum: each line was looked at, and its equivalent width measured.
"""

from __future__ import annotations

import os
from dataclasses import replace
from functools import cache
from pathlib import Path

import pytest

from fathomline.atomic import load_atomic_data
from fathomline.job.draft import Draft, draft
from fathomline.spectra import read_spectrum

FOLDER = "FATHOMLINE_REAL_DATA"
REDSHIFTS = (0.7865, 0.9424, 1.5558, 1.6279, 1.6919)

pytestmark = pytest.mark.skipif(FOLDER not in os.environ, reason=f"{FOLDER} is not set")

YES = {
    0.7865: "Fe II 2382, Fe II 2600, Mg II 2796, Mg II 2803",
    0.9424: "Fe II 2344, Fe II 2382, Fe II 2586, Fe II 2600, Mg II 2803",
    1.5558: "Al II 1670, Fe II 2344, Fe II 2382, Fe II 2586, Fe II 2600, Mg II 2796",
    1.6279: "Al II 1670, Al III 1854, Al III 1862, Fe II 2344, Fe II 2382, Fe II 2600",
    1.6919: "Fe II 1608, Al II 1670, Al III 1854, Fe II 2374, Fe II 2382, Fe II 2600",
}
# not detected, or detected and not usable
NO = {
    0.7865: "Fe II 2374, Mg I 2852, Mn II 2576, Mn II 2594, Mn II 2606",
    0.9424: "Fe II 2260, Mn II 2576, Mn II 2594, Mn II 2606",
    1.5558: "Al III 1862, Si II 1808, Mg I 2852, Cr II 2056, Cr II 2062, Cr II 2066, Zn II 2026, "
    "Zn II 2062, Mn II 2576, Mn II 2594, Mn II 2606, Ni II 1709, Ni II 1741, Ni II 1751",
    1.6279: "Fe II 1608, Fe II 2374, Mg II 2796, Cr II 2056, Cr II 2062, Cr II 2066, Zn II 2026, "
    "Zn II 2062, Mn II 2576, Mn II 2594, Mn II 2606, Ni II 1709, Ni II 1741, Ni II 1751, "
    "Si II 1808",
    1.6919: "Fe II 1611, Si II 1808, Ni II 1709, Ni II 1741, Ni II 1751, Zn II 2026, Zn II 2062, "
    "Cr II 2056, Cr II 2062, Cr II 2066, Fe II 2249, Fe II 2260, Mn II 2576, Mn II 2594, "
    "Mn II 2606, Mg II 2796, Mg II 2803, Mg I 2852",
}
# Disagreements with a reason
JUSTIFIED = {
    (1.6279, "Fe II 1608"): "the list has 2.0 ± 0.6 mÅ from a plain sum over all the profile; "
    "weighted by the profile of the other Fe II lines it is 10σ, and 9σ are expected from "
    "the 77σ of Fe II 2382 with 0.12 of its strength",
}
# velocities of the outermost components of the lists, km/s
EXTENTS = {
    0.7865: (-30.0, 30.0),
    0.9424: (-75.0, 60.0),
    1.5558: (-75.0, 55.0),
    1.6279: (-75.0, 50.0),
    1.6919: (-170.0, 140.0),
}


@cache
def drafted(redshift: float, name: str = "he2217_full.fits", fwhm: float = 5.1) -> Draft:
    spectrum = replace(read_spectrum(Path(os.environ[FOLDER]) / name), name="full")
    others = [z for z in REDSHIFTS if z != redshift]
    return draft([spectrum], load_atomic_data(), redshift, fwhm=fwhm, other_redshifts=others)


def disagreements(result: Draft) -> dict[str, str]:
    z = result.redshift
    found = {}
    for expected, names in ((True, YES[z]), (False, NO[z])):
        for name in names.split(", "):
            candidate = result[name]
            if candidate.used != expected:
                found[name] = candidate.reason
    return found


@pytest.mark.parametrize("redshift", REDSHIFTS)
@pytest.mark.parametrize("name", ["he2217_full.fits", "he2217_full_aligned.fits"])
def test_decisions_agree_with_those_made_by_hand(redshift, name):
    found = disagreements(drafted(redshift, name))
    print(redshift, name, found)
    assert set(found) <= {line for z, line in JUSTIFIED if z == redshift}


@pytest.mark.parametrize("redshift", REDSHIFTS)
def test_extent_is_that_of_the_components_seen_by_eye(redshift):
    low, high = drafted(redshift).extent
    # two bins of half a line's width, or three: the eye's values are rounded to 5 km/s. At
    # z = 1.6919 three Fe II lines and Mg II 2796 have another weak component at +158 km/s
    assert low == pytest.approx(EXTENTS[redshift][0], abs=15.0)
    more = 20.0 if redshift == 1.6919 else 0.0
    assert -15.0 < high - EXTENTS[redshift][1] < 15.0 + more


def test_known_neighbours_stay_out_of_the_windows():
    # the list: Al III 1854 of z = 1.6919 ends at -50 km/s of Mg II 2796 at z = 0.7865
    assert drafted(0.7865)["Mg II 2796"].window[0] > -75.0
    # unrelated line at -130 km/s
    assert drafted(1.6279)["Al III 1862"].window[0] > -125.0
    # use v < +130: Mg II 2796 of z = 0.7865 beyond
    assert drafted(1.6919)["Al III 1854"].window[1] < 145.0
    # the absorber at -260 km/s is another one
    for candidate in drafted(0.9424).used:
        assert candidate.window[0] > -200.0


def test_telluric_lines_across_a_profile_are_excluded():
    # the list: telluric O2 across Fe II 2344; 2586 too strong, a line of H2O at -175 km/s
    assert drafted(1.6919)["Fe II 2344"].exclude
    assert any(low < -175.0 < high for low, high in drafted(1.6919)["Fe II 2586"].exclude)
