"""What a job says besides its components is in its simulated spectra too."""

from __future__ import annotations

import pytest

from fathomline.job import build_job, job_to_data, parse_job
from fathomline.job.demo import demo_text
from fathomline.job.measurement import measure
from fathomline.job.reading import read_job
from fathomline.job.simulation import Noise, simulate_to_folder

TERMS = {
    "distortions of some regions": {
        "distortion": [
            {"spectrum": "red", "regions": [1, 2, 3, 4, 5], "kind": "shift", "value": 500.0},
            {"spectrum": "red", "regions": [6, 7], "kind": "shift", "value": -500.0},
        ]
    },
    "partial covering": {
        "covering": [{"components": [2, 3], "value": {"value": 0.7, "min": 0.3, "max": 1.0}}]
    },
    "heavy magnesium": {"atomic": {"heavy_magnesium": 2.0}},
}


@pytest.mark.parametrize("name", TERMS)
def test_noise_free_spectra_give_back_what_was_put_in(name, tmp_path):
    data = {**job_to_data(parse_job(demo_text(), "x.toml", check_files=False)), **TERMS[name]}
    data["alpha"] = {"dalpha": 6.0}
    quiet = Noise(float("inf"), 1)
    simulate_to_folder(build_job(data), "x.toml", tmp_path / "s", quiet, pixel=2.0)
    result = measure(read_job(tmp_path / "s" / "x.toml"))
    # two independent routes: 1e-5 of the flux, that is 0.01 ppm here
    assert result.dalpha == pytest.approx(6.0, abs=0.02)
    if name == "partial covering":
        assert result.fit.values["covering[1].value"] == pytest.approx(0.7, abs=1e-3)
