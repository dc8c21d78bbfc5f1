"""Writing a job and reading it back gives an equal job; equal jobs have equal digests."""

import copy
import json
import math
import pickle
import tomllib
from importlib import resources

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from fathomline.errors import JobError
from fathomline.job import (
    Job,
    Number,
    build_job,
    canonical_json,
    job_digest,
    job_to_data,
    job_to_toml,
    parse_job,
    read_job,
    write_job,
)

SETTINGS = settings(max_examples=50, deadline=None, suppress_health_check=[HealthCheck.too_slow])

IDS = ["red", "blue", "UVES_1.a"]
IONS = ["Fe II", "Mg II", "H I"]
# Quotes, escapes, control characters, and line ends that only some readers count as such.
TEXT = st.text(
    alphabet=st.one_of(
        st.sampled_from("ab\"'\\\n\r\t\x00\x1f\x7f#=[]{}\u2028é"), st.characters(codec="utf-8")
    ),
    min_size=1,
    max_size=12,
).filter(str.strip)
FILE = st.one_of(TEXT.filter(lambda text: "${" not in text), st.just("${HALDEN_DATA}/red.fits"))


def reals(lower, upper):
    floats = st.floats(lower, upper)
    return st.one_of(floats, floats.map(round))


@st.composite
def numbers(draw, lower, upper, ties=()):
    kind = draw(st.sampled_from(["plain", "fixed", "bounded", "tied"]))
    if kind == "tied" and ties:
        tie = {"same_as": draw(st.sampled_from(ties))}
        if draw(st.booleans()):
            tie["ratio"] = draw(reals(1, 2))
        if draw(st.booleans()):
            tie["offset"] = draw(st.floats(0, 1))
        return tie
    value = draw(reals(lower, upper))
    if kind == "plain":
        return value
    table = {"value": value, "fixed": kind == "fixed"}
    if kind == "bounded" and lower < value < upper:
        table |= {"min": lower, "max": upper}
    return table


def optional(draw, table, **entries):
    for key, strategy in entries.items():
        if draw(st.booleans()):
            table[key] = draw(strategy)
    return table


def wavelength_ranges():
    return st.tuples(reals(3000, 5000), reals(5001, 9000)).map(list)


@st.composite
def distortions(draw, count_spectra):
    kind = draw(st.sampled_from(["shift", "slope", "sawtooth", "table"]))
    several = st.lists(st.sampled_from(IDS[:count_spectra]), min_size=1, unique=True)
    table = {
        "spectrum": draw(st.one_of(st.sampled_from(IDS[:count_spectra]), several)),
        "kind": kind,
    }
    pivot = {"pivot": draw(reals(3000, 9000))}
    edges = draw(st.lists(st.floats(3000, 9000), min_size=2, unique=True).map(sorted))
    orders = st.sampled_from(
        [{"order_edges": edges}, {"order_spacing": draw(reals(20, 90))} | pivot]
    )
    needed = {"shift": {}, "slope": pivot, "sawtooth": draw(orders), "table": {"file": draw(FILE)}}
    return optional(
        draw,
        table | needed[kind],
        value=st.one_of(st.sampled_from([0, 1]), st.floats(-500, 500)),
        sigma=st.one_of(st.sampled_from([0, math.inf]), st.floats(0, 900)),
        shared=TEXT,
    )


@st.composite
def blends(draw, index):
    def ties(quantity):
        return [f"{s}.{quantity}" for s in (["component[1]"] + [f"blend[{index}]"] * (index > 0))]

    table = {"b": draw(numbers(1, 90)), "logN": draw(numbers(10, 14, ties("logN['Fe II']")[:1]))}
    optional(draw, table, velocity=st.one_of(st.just(0), numbers(-80, 80, ties("velocity"))))
    kind = draw(st.sampled_from(["line", "lines", "wavelength"]))
    if kind == "wavelength":
        return table | {"wavelength": draw(reals(3000, 9000))}
    names = ["C IV 1548", "C IV 1550", "Al II 1670"]
    line = st.sampled_from(names)
    chosen = line if kind == "line" else st.lists(line, min_size=1, unique=True)
    return table | {kind: draw(chosen), "redshift": draw(reals(0, 7))}


@st.composite
def coverings(draw, count_components):
    order = draw(st.permutations(range(1, count_components + 1)))
    cut = draw(st.integers(1, count_components))
    groups = [group for group in (order[:cut], order[cut:]) if group]
    return [{"components": list(group), "value": draw(numbers(0, 1))} for group in groups]


@st.composite
def atomic_tables(draw):
    fraction = draw(st.floats(0, 1))
    abundance = st.sampled_from(
        ["terrestrial", "24", {"24": fraction, "26": 1 - fraction}, {"25": 1}]
    )
    table = optional(
        draw,
        {},
        structure=st.sampled_from(["isotopic", "composite"]),
        folder=FILE,
        abundances=st.dictionaries(st.sampled_from(["Si", "Fe", "Ti"]), abundance, max_size=2),
        heavy_magnesium=numbers(0, 4),
        override=st.lists(
            st.fixed_dictionaries(
                {"transition": st.sampled_from(["Fe II 2382", "Mg II 2796"]), "q": reals(-9, 9)},
                optional={"wavenumber": reals(1e4, 5e4), "f": reals(1, 2), "gamma": reals(0, 9)},
            ),
            max_size=2,
            unique_by=lambda entry: entry["transition"],
        ),
    )
    heavy = table.get("heavy_magnesium")
    if isinstance(heavy, dict):
        heavy["fixed"] = heavy["fixed"] if "min" not in heavy else False
        if not heavy["fixed"]:
            optional(draw, table, heavy_magnesium_sigma=reals(1, 2))
    return table


@st.composite
def spectra(draw, index):
    table = {"id": IDS[index], "file": draw(FILE)}
    optional(
        draw,
        table,
        columns=st.fixed_dictionaries({}, optional={"wavelength": TEXT, "error": TEXT}),
        unit=TEXT,
        medium=st.sampled_from(["vacuum", "air"]),
        error_file=FILE,
        continuum_file=FILE,
    )
    frame = draw(st.sampled_from([None, "barycentric", "topocentric"]))
    if frame is not None:
        table["frame"] = frame
    if frame == "topocentric":
        table["berv"] = draw(reals(-30, 30))
    ties = ["spectrum[1].fwhm"] if index else []
    resolution = {"fwhm": draw(numbers(1, 10, ties))}
    if index:
        other = {"R": draw(reals(4e4, 2e5))}, {"table": draw(FILE)}
        resolution = draw(st.sampled_from([resolution, *other]))
    if "table" in resolution:
        pass
    elif not isinstance(resolution.get("fwhm"), dict) or "same_as" not in resolution["fwhm"]:
        optional(draw, resolution, error=reals(1, 5))
    else:
        resolution["fwhm"].pop("fixed", None)
    fwhm = resolution.get("fwhm")
    if isinstance(fwhm, dict) and "min" in fwhm:
        fwhm["fixed"] = False
    if "fwhm" in resolution and draw(st.booleans()):
        resolution |= {"slope": draw(reals(-2, 2)), "pivot": draw(reals(3000, 9000))}
    table["resolution"] = resolution
    optional(
        draw,
        table,
        exclude=st.lists(wavelength_ranges(), max_size=2),
        correlation=st.one_of(st.just("measured"), st.floats(-0.49, 0.49)),
    )
    return table


@st.composite
def regions(draw, count_spectra):
    lower = draw(reals(-300, -100))
    upper = draw(reals(100, 300))
    table = {"transition": f"{draw(st.sampled_from(IONS))} 2382", "window": [lower, upper]}
    return optional(
        draw,
        table,
        spectra=st.lists(st.sampled_from(IDS[:count_spectra]), min_size=1, unique=True),
        continuum=st.integers(-1, 5),
        zero_level=st.one_of(st.booleans(), numbers(-0.5, 0.5)),
        exclude=st.lists(st.tuples(st.floats(-90, -1), st.floats(0, 90)).map(list), max_size=2),
    )


@st.composite
def components(draw, index):
    def ties(quantity):
        return [f"component[{index}].{quantity}"] if index else []

    table = {"velocity": draw(numbers(-80, 80, ties("velocity")))}
    # The first quantity is in all components, so that ties to the one before have a target.
    table["temperature"] = draw(numbers(100, 9999, ties("temperature")))
    optional(draw, table, b_turb=numbers(1, 9))
    table["logN"] = {
        ion: draw(numbers(10, 14, ties(f"logN['{ion}']"))) for ion in draw(st.permutations(IONS))
    }
    return table


def fitting_regions(regions, names):
    """Numbers of the regions that use one of the spectra."""
    names = [names] if isinstance(names, str) else names
    return [
        count
        for count, region in enumerate(regions, start=1)
        if set(region.get("spectra", names)) & set(names)
    ]


@st.composite
def job_data(draw):
    count_spectra = draw(st.integers(1, 3))
    count_components = draw(st.integers(1, 3))
    position = {"ra": draw(st.floats(0, 359.9)), "dec": draw(reals(-90, 90))}
    data = {
        "schema": 1,
        "absorber": {"name": draw(TEXT), "redshift": draw(reals(0, 7))}
        | draw(st.sampled_from([{}, position])),
        "spectrum": [draw(spectra(index)) for index in range(count_spectra)],
        "region": draw(st.lists(regions(count_spectra), min_size=1, max_size=2)),
        "component": [draw(components(i)) for i in range(count_components)],
        "distortion": draw(st.lists(distortions(count_spectra), max_size=2)),
        "blend": [draw(blends(i)) for i in range(draw(st.integers(0, 2)))],
    }
    if draw(st.booleans()):
        data["covering"] = draw(coverings(count_components))
    clean = [entry for entry in data["blend"] if "line" in entry]
    if clean:
        region = {"transition": clean[0]["line"], "redshift": clean[0]["redshift"]}
        data["region"].append(draw(regions(count_spectra)) | region)
    for entry in data["distortion"]:
        if draw(st.booleans()):
            entry["regions"] = fitting_regions(data["region"], entry["spectrum"])
            if not entry["regions"]:
                del entry["regions"]
    return optional(
        draw,
        data,
        atomic=atomic_tables(),
        alpha=st.builds(lambda number: {"dalpha": number}, numbers(-50, 50)),
        fit=st.fixed_dictionaries(
            {}, optional={"solver": st.just("lmfit"), "restarts": st.integers(0, 9),
                          "max_iterations": st.integers(1, 999), "seed": st.integers(0, 2**62)}
        ),
    )  # fmt: skip


JOBS = job_data().map(build_job)


def reread(job):
    return parse_job(job_to_toml(job), "elsewhere/job.toml", check_files=False)


@SETTINGS
@given(JOBS)
def test_written_jobs_read_back_equal(job):
    again = reread(job)
    assert again == job
    assert job_to_toml(again) == job_to_toml(job)
    assert job_digest(again) == job_digest(job)
    assert build_job(job_to_data(job)) == job
    # The data of a job and its text are one thing.
    assert tomllib.loads(job_to_toml(job)) == job_to_data(job)
    # The models take their own full dump, in which defaults are written out.
    assert Job.model_validate(job.model_dump(by_alias=True)) == job


@SETTINGS
@given(JOBS)
def test_copies_are_equal(job):
    assert pickle.loads(pickle.dumps(job)) == job
    assert copy.deepcopy(job) == job


def leaves(data, path=()):
    if isinstance(data, dict):
        for key, value in data.items():
            yield from leaves(value, (*path, key))
    elif isinstance(data, list):
        for index, value in enumerate(data):
            yield from leaves(value, (*path, index))
    else:
        yield path, data


@SETTINGS
@given(JOBS, st.data())
def test_the_digest_tells_each_value(job, data):
    tree = job_to_data(job)
    numeric = [
        (path, value)
        for path, value in leaves(tree)
        if isinstance(value, float) and math.isfinite(value)
    ]
    path, value = data.draw(st.sampled_from(numeric))
    parent = tree
    for part in path[:-1]:
        parent = parent[part]
    # The smallest change that a double can hold.
    parent[path[-1]] = math.nextafter(value, math.inf)
    try:
        other = build_job(tree)
    except JobError:
        return  # the value was at the end of its range
    assert other != job
    assert job_digest(other) != job_digest(job)


@SETTINGS
@given(JOBS, st.randoms(use_true_random=False))
def test_the_digest_ignores_the_order_of_keys_and_the_layout(job, random):
    def shuffled(data):
        if isinstance(data, dict):
            keys = list(data)
            random.shuffle(keys)
            return {key: shuffled(data[key]) for key in keys}
        return [shuffled(value) for value in data] if isinstance(data, list) else data

    other = build_job(shuffled(job_to_data(job)))
    assert other == job
    assert job_digest(other) == job_digest(job)


SMALL = {
    "schema": 1,
    "absorber": {"name": "a", "redshift": 1.0},
    "spectrum": [{"id": "red", "file": "${HALDEN_DATA}/red.fits", "resolution": {"fwhm": 5}}],
    "region": [{"transition": "Fe II 2382", "window": [-1, 1]}],
    "component": [{"velocity": 0, "b": 4, "logN": {"Fe II": 12.9}}],
}


def test_the_digest_is_what_it_was():
    # The text was written by hand from the rules of canonical_json.
    expected = {
        "absorber": {"name": "a", "redshift": 1.0},
        "component": [{"b": 4.0, "logN": {"Fe II": 12.9}, "velocity": 0.0}],
        "region": [{"transition": "Fe II 2382", "window": [-1.0, 1.0]}],
        "schema": 1,
        "spectrum": [{"file": "${HALDEN_DATA}/red.fits", "id": "red", "resolution": {"fwhm": 5.0}}],
    }
    assert canonical_json(build_job(SMALL)) == json.dumps(expected, separators=(",", ":"))
    digest = job_digest(build_job(SMALL))
    assert len(digest) == 64
    assert set(digest) <= set("0123456789abcdef")


def test_the_digest_of_the_demo_is_what_it_was():
    text = resources.files("fathomline.job").joinpath("demo.toml").read_text(encoding="utf-8")
    # recorded with version 0.1.0: the digest of a job must not change
    expected = "c8f9682b4c99698c0799b842559bfd45ef943aac1cca5d06fa3cd315818c84e6"
    assert job_digest(parse_job(text, "demo.toml", check_files=False)) == expected


@pytest.mark.parametrize(
    ("section", "addition"),
    [
        ("fit", {"restarts": 4, "seed": 1, "max_iterations": 200, "solver": "default"}),
        ("atomic", {"structure": "isotopic"}),
        ("atomic", {"heavy_magnesium": 1, "abundances": {}, "override": []}),
        ("atomic", {"heavy_magnesium": {"value": 1.0}}),
        ("distortion", []),
        ("blend", []),
        ("covering", []),
        ("alpha", {"dalpha": 0}),
        ("alpha", {"dalpha": {"value": -0.0, "fixed": False}}),
    ],
)
def test_defaults_that_are_written_out_change_nothing(section, addition):
    job = build_job(SMALL | {section: addition})
    assert job == build_job(SMALL)
    assert job_digest(job) == job_digest(build_job(SMALL))
    assert job_digest(build_job(SMALL | {"alpha": {"dalpha": 1e-9}})) != job_digest(job)


def test_forms_of_a_number_that_mean_the_same():
    region = SMALL["region"][0]
    zero = [build_job(SMALL | {"region": [region | {"zero_level": z}]}) for z in (True, 0, 0.0)]
    assert zero[0] == zero[1] == zero[2] != build_job(SMALL)
    assert zero[0].regions[0].zero_level == Number(value=0.0)
    assert "zero_level = true" in job_to_toml(zero[2])
    spectrum = SMALL["spectrum"][0]
    forms = [5, {"value": 5}, {"value": 5.0, "fixed": True}]
    jobs = [
        build_job(SMALL | {"spectrum": [spectrum | {"resolution": {"fwhm": f}}]}) for f in forms
    ]
    assert jobs[0] == jobs[1] == jobs[2]
    free = {"fwhm": {"value": 5, "fixed": False}}
    text = job_to_toml(build_job(SMALL | {"spectrum": [spectrum | {"resolution": free}]}))
    assert "resolution = { fwhm = { value = 5.0, fixed = false } }" in text


def test_the_layout_of_a_written_job():
    tie = {"same_as": "component[1].logN['Fe II']", "offset": 0.5}
    second = {"velocity": {"value": 3, "fixed": True}, "b": 2.5, "logN": {"Fe II": tie}}
    job = build_job(SMALL | {"component": [*SMALL["component"], second], "fit": {"seed": 7}})
    assert (
        job_to_toml(job)
        == """\
schema = 1

[absorber]
name = "a"
redshift = 1.0

[[spectrum]]
id = "red"
file = "${HALDEN_DATA}/red.fits"
resolution = { fwhm = 5.0 }

[[region]]
transition = "Fe II 2382"
window = [-1.0, 1.0]

[[component]]
velocity = 0.0
b = 4.0
logN = { "Fe II" = 12.9 }

[[component]]
velocity = { value = 3.0, fixed = true }
b = 2.5
logN = { "Fe II" = { same_as = 'component[1].logN["Fe II"]', offset = 0.5 } }

[fit]
seed = 7
"""
    )


def test_write_job_replaces_the_file_or_leaves_it(tmp_path, monkeypatch):
    path = tmp_path / "job.toml"
    path.write_text("old")
    job = build_job(SMALL)

    def broken(self, target):
        raise OSError(28, "No space left on device")

    with monkeypatch.context() as patch:
        patch.setattr("pathlib.Path.replace", broken)
        with pytest.raises(JobError, match=r"job\.toml: cannot write the job file: No space"):
            write_job(job, path)
    assert path.read_text() == "old"
    write_job(job, path)
    assert read_job(path, check_files=False) == job
    assert [entry.name for entry in tmp_path.iterdir()] == ["job.toml"]
    with pytest.raises(JobError, match="cannot write"):
        write_job(job, tmp_path / "none" / "job.toml")


def test_jobs_are_frozen():
    job = build_job(SMALL)
    with pytest.raises(ValueError, match="frozen"):
        job.absorber.redshift = 2.0
    with pytest.raises(ValueError, match="unknown key 'colour'"):
        Number(value=1.0, colour=2)


SHIFT = {"spectrum": "red", "kind": "shift"}
TABLE = {"spectrum": "red", "kind": "table", "file": "drift.ecsv"}


@pytest.mark.parametrize(
    ("section", "one", "other"),
    [
        ("distortion", SHIFT, SHIFT | {"spectrum": ["red"], "value": -0.0, "sigma": 0}),
        ("distortion", TABLE, TABLE | {"value": 1, "sigma": 0.0}),
        (
            "blend",
            {"wavelength": 4321, "b": 9, "logN": 12},
            {"wavelength": 4321.0, "b": 9, "logN": 12, "velocity": {"value": 0}},
        ),
    ],
)
def test_defaults_of_entries_that_are_written_out_change_nothing(section, one, other):
    first, second = (build_job(SMALL | {section: [entry]}) for entry in (one, other))
    assert first == second
    assert job_digest(first) == job_digest(second) != job_digest(build_job(SMALL))
    assert job_to_data(first) == job_to_data(second)


def test_a_table_that_counts_for_nothing_is_not_one_that_counts_as_it_is():
    job = build_job(SMALL | {"distortion": [TABLE | {"value": 0}]})
    assert job.distortions[0].value == 0.0
    assert reread(job) == job
    assert "value = 0.0" in job_to_toml(job)
    assert job_digest(job) != job_digest(build_job(SMALL | {"distortion": [TABLE]}))


def test_a_free_distortion_has_a_digest():
    free, held, fixed = (
        build_job(SMALL | {"distortion": [SHIFT | {"sigma": sigma}]})
        for sigma in (math.inf, 200.0, 0.0)
    )
    assert "sigma = inf" in job_to_toml(free)
    assert '"sigma":"inf"' in canonical_json(free)
    assert len({job_digest(job) for job in (free, held, fixed)}) == 3
    assert [job.distortions[0].is_free for job in (free, held, fixed)] == [True, True, False]
    assert [job.distortions[0].has_prior for job in (free, held, fixed)] == [False, True, False]


def test_the_layout_of_the_optional_tables():
    extra = {
        "distortion": [SHIFT | {"sigma": math.inf, "shared": "red-2010"}],
        "atomic": {
            "heavy_magnesium": {"value": 1, "fixed": False},
            "abundances": {"Si": {"28": 1}},
            "override": [{"transition": "Fe II 2382", "q": 1460}],
        },
        "blend": [{"line": "C IV 1548", "redshift": 1.7421, "b": 12, "logN": 13}],
        "covering": [{"components": [1], "value": 0.9}],
    }
    text = job_to_toml(build_job(SMALL | extra))
    for block in (
        """
[[distortion]]
spectrum = "red"
kind = "shift"
sigma = inf
shared = "red-2010"

[atomic]
abundances = { Si = { 28 = 1.0 } }
heavy_magnesium = { value = 1.0, fixed = false }

[[atomic.override]]
transition = "Fe II 2382"
q = 1460.0

[[region]]
""",
        """
[[blend]]
line = "C IV 1548"
redshift = 1.7421
b = 12.0
logN = 13.0

[[covering]]
components = [1]
value = 0.9
""",
    ):
        assert block in text
    only = build_job(SMALL | {"atomic": {"override": extra["atomic"]["override"]}})
    assert "[atomic]" not in job_to_toml(only)
    assert reread(only) == only
