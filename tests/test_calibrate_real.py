"""Two halves of a real quasar spectrum against an independent determination of their shifts.

The expected numbers are those of the description that comes with the data, "First minus second
half", found there from the metal lines of the quasar absorbers.
"""

from __future__ import annotations

import json
import os
from pathlib import Path

import numpy as np
import pytest

from fathomline.cli.main import run

REAL = os.environ.get("FATHOMLINE_REAL_DATA")

pytestmark = pytest.mark.skipif(
    REAL is None, reason="FATHOMLINE_REAL_DATA does not name the data folder"
)

RANGES = ((4160, 4560), (4560, 4720), (4720, 5000), (5000, 5650), (5840, 6810), (6860, 7530))
EXPECTED = {
    "": ((186, 29), (198, 46), (-39, 84), (-57, 54), (222, 34), (306, 55)),
    "_aligned": ((-9, 29), (11, 45), (-49, 84), (37, 57), (36, 30), (-73, 51)),
}


def compare(capsys, ending):
    files = [str(Path(REAL) / f"he2217_{half}{ending}.fits") for half in ("first", "second")]
    ranges = [word for low, high in RANGES for word in ("--range", str(low), str(high))]
    assert run(["calibrate", *files, *ranges, "--json"]) == 0
    return json.loads(capsys.readouterr().out)


@pytest.mark.parametrize("ending", EXPECTED, ids=["native", "aligned"])
def test_shifts_between_the_halves(capsys, ending):
    found = compare(capsys, ending)["ranges"]
    with capsys.disabled():
        print(f"\n{'range (Å)':>12} {'here (m/s)':>14} {'described':>14} {'σ apart':>8}")
        for row, (value, error) in zip(found, EXPECTED[ending], strict=True):
            apart = (row["velocity"] - value) / np.hypot(row["error"], error)
            print(
                f"{row['low']:6.0f}-{row['high']:.0f} {row['velocity']:+8.0f} ± {row['error']:3.0f}"
                f" {value:+8d} ± {error:3d} {apart:+8.2f}"
            )
    for row, (value, error) in zip(found, EXPECTED[ending], strict=True):
        # both come from the same pixels, so the combined error is generous
        assert abs(row["velocity"] - value) < 2.5 * np.hypot(row["error"], error), row
        assert row["chunks"] >= 4


def test_aligned_halves_have_no_shift_left(capsys):
    result = compare(capsys, "_aligned")
    shift = result["terms"][0]
    assert abs(shift["value"]) < 2.5 * shift["error"]
