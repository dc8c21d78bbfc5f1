"""Reading jobs: the example of the documentation, and a zoo of faulty ones."""

import subprocess
import sys

import pytest

from fathomline.errors import JobError
from fathomline.job import Number, Reference, build_job, job_to_data, parse_job, read_job

# The line numbers below refer to this text; `changed` replaces whole lines of it.
EXAMPLE = """\
schema = 1

[absorber]
name = "Halden A z1.1508"      # free text
redshift = 1.15085
ra = 76.0
dec = -44.0
blind = false

[[spectrum]]
id = "red"
file = "red.fits"
columns = { wavelength = "WAVE", flux = "FLUX", error = "ERR", continuum = "CONT" }
unit = "Angstrom"
medium = "vacuum"
frame = "barycentric"
resolution = { fwhm = 5.2, error = 0.2 }

[[region]]
transition = "Fe II 2382"
window = [-150.0, 220.0]
spectra = ["red"]
continuum = 1
zero_level = false
exclude = [[-31.0, -22.5]]

[[region]]
transition = "Mg II 2796"
window = [-100, 100]

[[component]]
velocity = -12.3
b = 4.2
logN = { "Fe II" = 12.9, "Mg II" = 13.2 }

[[component]]
velocity = 20
temperature = 8000
b_turb = 2.0
logN."Fe II" = 12.1

[fit]
solver = "default"
restarts = 4
"""


def changed(replacements):
    lines = EXAMPLE.splitlines()
    for number, text in replacements.items():
        lines[number - 1] = text
    return "\n".join(lines) + "\n"


def faults_in(text, **options):
    with pytest.raises(JobError) as caught:
        parse_job(text, "halden.toml", **{"check_files": False, **options})
    assert str(caught.value) == "\n".join(caught.value.faults)
    return caught.value.faults


def test_the_example(tmp_path):
    path = tmp_path / "halden.toml"
    path.write_text(EXAMPLE, encoding="utf-8")
    (tmp_path / "red.fits").touch()
    job = read_job(path)
    assert job.schema_version == 1
    assert job.absorber.redshift == 1.15085
    assert job.spectra[0].columns.continuum == "CONT"
    # A FWHM is known, not fitted, unless the job frees it.
    assert job.spectra[0].resolution.fwhm == Number(value=5.2, fixed=True)
    assert job.alpha.dalpha == Number(value=0.0)
    assert job.atomic.structure == "isotopic"
    first, second = job.regions
    assert (first.ion, first.label, first.window) == ("Fe II", "2382", (-150.0, 220.0))
    assert first.exclude == ((-31.0, -22.5),)
    assert first.zero_level is None
    assert second.spectra is None
    assert job.components[0].logN["Mg II"].value == 13.2
    assert job.components[1].b is None
    assert job.fit.seed == 1
    assert job.spectrum_path(0) == tmp_path / "red.fits"
    assert job.error_path(0) is job.continuum_path(0) is None
    assert job.locate("region", 1, "window") == f"{path}:29"
    assert job.locate("region", 1, "exclude") == f"{path}:27"


def test_a_byte_order_mark_and_windows_line_ends_do_no_harm(tmp_path):
    path = tmp_path / "job.toml"
    path.write_bytes(b"\xef\xbb\xbf" + EXAMPLE.replace("\n", "\r\n").encode())
    job = read_job(path, check_files=False)
    assert job == parse_job(EXAMPLE, "other.toml", check_files=False)
    assert job.locate("fit") == f"{path}:42"


ZOO = [
    # Schema and top level
    ({1: ""}, 1, "'schema': missing; write schema = 1"),
    ({1: "schema = 2"}, 1, "'schema': this version reads schema 1, found the number 2"),
    ({1: 'schema = "1"'}, 1, "'schema': expected a whole number, found text '1'"),
    ({1: "schema = true"}, 1, "'schema': expected a whole number, found true"),
    ({1: "schema = 1.0"}, 1, "expected a whole number, found the number 1"),
    ({2: "name = 1"}, 2, "unknown key 'name'; valid keys: schema, absorber, spectrum"),
    ({42: "[fits]"}, 42, "'fits': unknown key 'fits'; did you mean 'fit'?"),
    ({42: "[[fit]]"}, 42, "[fit]: expected a table, found an array"),
    ({2: "fit = 3", 42: "", 43: "", 44: ""}, 2, "[fit]: expected a table, found the number 3"),
    ({42: "[budget]", 43: "", 44: ""}, 42, "[budget]: not available in this version"),
    ({42: "[budget]", 43: "", 44: ""}, 42, "not available in this version"),
    # Absorber
    ({4: ""}, 3, "[absorber] 'name': missing"),
    ({4: "name = 12"}, 4, "[absorber] 'name': expected text, found the number 12"),
    ({4: 'name = " "'}, 4, "expected text, found nothing between the quotes"),
    ({5: 'redshift = "1.15"'}, 5, "'redshift': expected a number, found text '1.15'"),
    ({5: "redshift = true"}, 5, "expected a number, found true"),
    ({5: "redshift = 1979-05-27"}, 5, "expected a number, found a date or time"),
    ({5: "redshift = nan"}, 5, "expected a finite number, found nan"),
    ({5: "redshift = inf"}, 5, "expected a finite number, found inf"),
    ({5: "redshift = -1"}, 5, "expected a number above -1, found -1"),
    ({5: "redshift = 0x" + "f" * 999}, 5, "expected a finite number"),
    ({6: "ra = 360"}, 6, "[absorber] 'ra': expected 0 <= ra < 360 deg, found 360"),
    ({7: "dec = -90.5"}, 7, "expected -90 <= dec <= 90 deg, found -90.5"),
    ({7: ""}, 6, "'ra': given without 'dec'"),
    ({8: "blind = true"}, 8, "blinding is not available in this version"),
    ({8: "blind = 0"}, 8, "expected true or false, found the number 0"),
    # Spectra
    ({11: 'id = "red arm"'}, 11, "expected an id of letters, digits"),
    ({12: ""}, 10, "[[spectrum]] 1 'file': missing"),
    ({13: 'columns = { wave = "W" }'}, 13, "'columns.wave': unknown key 'wave'; did you mean"),
    ({13: 'columns = ["W"]'}, 13, "expected a table, found an array"),
    ({15: 'medium = "vacum"'}, 15, 'expected "vacuum" or "air", found text'),
    ({16: 'frame = "topocentric"'}, 16, "a topocentric spectrum needs berv"),
    ({16: "berv = 12.5"}, 16, 'berv goes only with frame = "topocentric"'),
    ({17: ""}, 10, "[[spectrum]] 1 'resolution': missing"),
    ({17: "resolution = 5.2"}, 17, "expected a table, found the number 5.2"),
    ({17: "resolution = {}"}, 17, "one of 'fwhm' (km/s), 'R' and 'table', found none"),
    ({17: "resolution = { fwhm = 5, R = 6e4 }"}, 17, "found 'fwhm' and 'R'"),
    ({17: "resolution = { R = -1 }"}, 17, "'resolution.R': expected a number above 0, found -1"),
    ({17: 'resolution = { table = "l.ecsv", R = 1 }'}, 17, "found 'R' and 'table'"),
    ({17: "resolution = { fwhm = 0 }"}, 17, "must be above 0 km/s, found 0"),
    ({17: "resolution = { fwhm = { value = 5, min = 4 } }"}, 17, "add fixed = false"),
    # Regions
    ({20: 'transitions = "Fe II 2382"', 21: ""}, 20, "unknown key 'transitions'; did you mean"),
    ({20: 'transition = "FeII 2382"'}, 20, "expected an ion and a label"),
    ({20: 'transition = "Si II 1526"'}, 20, "no component has a logN of Si II; they have: Fe II"),
    (
        {21: "window = [220, -150]"},
        21,
        "[[region]] 1 'window': lower edge 220 must be below upper edge -150; "
        "write [lower, upper] in km/s",
    ),
    ({21: "window = [220]"}, 21, "expected [lower, upper] in km/s, found an array of 1"),
    ({21: 'window = ["a", 1]'}, 21, "'window[1]': expected a number, found text 'a'"),
    ({21: "window = [-1e6, 1e6]"}, 21, "beyond the speed of light"),
    ({22: 'spectra = ["blue"]'}, 22, "there is no spectrum 'blue'; the ids are: red"),
    ({22: 'spectra = ["red", "red"]'}, 22, "spectrum 'red' is named twice"),
    ({22: 'spectra = "red"'}, 22, "expected an array of spectrum ids, found text 'red'"),
    ({22: "spectra = []"}, 22, "names no spectrum"),
    ({23: "continuum = -2"}, 23, "expected an order from -1 to 20, found -2"),
    ({23: "continuum = 1.5"}, 23, "expected a whole number, found the number 1.5"),
    ({24: "zero_level = 'yes'"}, 24, "expected a number, found text 'yes'"),
    ({25: "exclude = [[-31.0, -22.5],\n [200, 230]]"}, 26, "'exclude[2]': 200 to 230 km/s reaches"),
    ({25: "exclude = [-31.0, -22.5]"}, 25, "'exclude[1]': expected [lower, upper]"),
    # Components
    ({32: ""}, 31, "[[component]] 1 'velocity': missing"),
    ({33: ""}, 31, "[[component]] 1: no width; write b (km/s), or temperature (K)"),
    ({33: "b = 0"}, 33, "[[component]] 1 'b': must be above 0 km/s, found 0"),
    ({33: "b = 150"}, 33, "150 is outside the default bounds 0.3 to 100 km/s"),
    ({33: "b = { value = 4, min = 5 }"}, 33, "value 4 is below min 5"),
    ({33: "b = { value = 4, max = 3 }"}, 33, "value 4 is above max 3"),
    ({33: "b = { value = 4, min = 6, max = 5 }"}, 33, "min 6 must be below max 5"),
    ({33: "b = { value = 4, min = -1 }"}, 33, "min must be above 0 km/s, found -1"),
    ({33: "b = { fixed = true }"}, 33, "no value; write { value = ... }"),
    ({33: "b = { value = 4, tied = 1 }"}, 33, "'b.tied': unknown key 'tied'"),
    ({33: "b = { value = 4, ratio = 2 }"}, 33, "'ratio' goes only with same_as"),
    ({34: "logN = {}", 40: 'logN = { "Mg II" = 1e1, "Fe II" = 9 }'}, 34, "names no ion"),
    ({34: "logN = 12.9"}, 34, "expected a table of ions such as"),
    ({34: 'logN = { "Fe II" = 12.9, "MgII" = 13 }'}, 34, 'expected an ion such as "Fe II"'),
    ({34: 'logN = { "Fe II" = "x", "Mg II" = 13 }'}, 34, "'logN[\"Fe II\"]': expected a number"),
    ({34: 'logN = { "Fe II" = 30, "Mg II" = 13 }'}, 34, "30 is outside the default bounds 5 to"),
    ({33: "b = 4.2\nb_turb = 1"}, 33, "b does not go with temperature and b_turb"),
    ({38: ""}, 39, "b_turb needs a temperature"),
    ({38: "temperature = 5"}, 38, "5 is outside the default bounds 10 to 1000000 K"),
    ({39: "b_turb = -1"}, 39, "must be at least 0 km/s, found -1"),
    # Ties
    ({33: 'b = { same_as = "component[3].b" }'}, 33, "the last one is component[2]"),
    ({33: 'b = { same_as = "component[2].b" }'}, 33, "that component has no such number"),
    ({33: 'b = { same_as = "component[2].b_turb" }'}, 33, "b is tied to b_turb of component[2]"),
    ({33: 'b = { same_as = "component[0].b" }'}, 33, "names no number; write for example"),
    ({33: 'b = { same_as = "component[2].width" }'}, 33, "a component has no 'width'"),
    ({33: 'b = { same_as = "component[1].b" }'}, 33, "circle: component[1].b → component[1].b"),
    ({37: 'velocity = { same_as = "component[1].velocity", min = 1 }'}, 37, "'min' does not go"),
    ({37: 'velocity = { same_as = "component[1].velocity", ratio = 0 }'}, 37, "ratio 0 ties to"),
    (
        {40: "logN.\"Fe II\" = { same_as = 'component[1].logN' }"},
        40,
        "logN needs an ion: component[1].logN['Fe II']",
    ),
    (
        {38: "b = { same_as='component[1].b', offset=-4.2 }", 39: ""},
        38,
        "the tie gives 0; it must be above 0 km/s",
    ),
    (
        {17: "resolution = { fwhm = { same_as = 'spectrum[1].fwhm' }, error = 1 }"},
        17,
        "does not go with a tied fwhm",
    ),
    # Fit
    ({43: 'solver = "magic"'}, 43, '[fit] \'solver\': expected "default" or "lmfit"'),
    ({44: "restarts = -1"}, 44, "expected a count from 0 to 10000, found -1"),
    ({44: "restarts = 1e3"}, 44, "expected a whole number, found the number 1000"),
    ({44: "Restarts = 1"}, 44, "unknown key 'Restarts'; did you mean 'restarts'?"),
    # Not TOML
    ({33: "b 4.2"}, 33, "not valid TOML"),
    ({33: "b = 4.2\nb = 4.3"}, 34, "key 'b' is given twice; the first is in line 33"),
    ({42: "[absorber]"}, 42, "table [absorber] is given twice; the first is in line 3"),
]


@pytest.mark.parametrize(("replacements", "line", "fragment"), ZOO)
def test_zoo_of_faults(replacements, line, fragment):
    faults = faults_in(changed(replacements))
    matching = [message for message in faults if fragment in message]
    assert len(matching) == 1, faults
    assert matching[0].startswith(f"halden.toml:{line}: ")
    assert "\n" not in matching[0]


def test_another_schema_is_the_only_fault():
    assert len(faults_in(changed({1: "schema = 7", 3: "[quasar]"}))) == 1


def test_all_faults_are_reported_in_the_order_of_the_file():
    text = changed(
        {
            5: 'redshift = "big"',
            12: 'fiel = "red.fits"',
            21: "window = [220, -150]",
            33: 'b = { same_as = "component[9].b" }',
            40: 'logN."FeII" = 12.1',
            44: "restarts = -1",
        }
    )
    assert faults_in(text) == (
        "halden.toml:5: [absorber] 'redshift': expected a number, found text 'big'",
        "halden.toml:10: [[spectrum]] 1 'file': missing",
        "halden.toml:12: [[spectrum]] 1 'fiel': unknown key 'fiel'; did you mean 'file'?",
        "halden.toml:21: [[region]] 1 'window': lower edge 220 must be below upper edge -150; "
        "write [lower, upper] in km/s",
        "halden.toml:33: [[component]] 1 'b.same_as': component[9].b does not exist: "
        "the last one is component[2]",
        'halden.toml:40: [[component]] 2 \'logN["FeII"]\': expected an ion such as "Fe II", '
        "found text 'FeII'",
        "halden.toml:44: [fit] 'restarts': expected a count from 0 to 10000, found -1",
    )


def test_empty_and_minimal_documents():
    assert faults_in("") == (
        "halden.toml:1: [[spectrum]]: missing; at least one is needed",
        "halden.toml:1: [[region]]: missing; at least one is needed",
        "halden.toml:1: 'schema': missing; write schema = 1",
        "halden.toml:1: [absorber]: missing",
    )
    faults = faults_in("schema = 1\n[region]\nwindow = [1, 2]\n")
    assert any("2: [[region]]: expected an array of tables; write [[region]]" in f for f in faults)
    assert faults_in("schema = 1\nspectrum = 'x'")[-1].startswith(
        "halden.toml:2: [[spectrum]]: expected an array of tables [[spectrum]], found text 'x'"
    )


def test_repeated_spectrum_ids():
    text = EXAMPLE + '[[spectrum]]\nid = "red"\nfile = "b.fits"\nresolution = { R = 5e4 }\n'
    assert faults_in(text) == (
        "halden.toml:46: [[spectrum]] 2 'id': 'red' is already the id of spectrum 1",
    )


def test_a_circle_of_ties_is_reported_once_with_its_chain():
    text = EXAMPLE + "".join(
        f"[[component]]\nvelocity = 1\nb = {{ same_as = 'component[{target}].b' }}\n"
        "logN.'Fe II' = 12\n"
        for target in (4, 5, 4, 3)
    )
    assert faults_in(text) == (
        "halden.toml:51: [[component]] 4 'b.same_as': the ties form a circle: "
        "component[4].b → component[5].b → component[4].b",
    )


def test_chains_of_ties_and_their_start_values():
    text = changed(
        {
            17: "resolution = { fwhm = { value = 5.2, fixed = false }, error = 0.2 }",
            24: "zero_level = true",
            34: 'logN = { "Fe II" = 12.9, "Mg II" = { same_as = "component[2].logN[\'Fe II\']",'
            " offset = 1 } }",
            37: "velocity = { same_as = 'component[1].velocity', ratio = 2, offset = 30 }",
            40: 'logN."Fe II" = { same_as = \'component[1].logN["Fe II"]\', offset = -1 }',
        }
    )
    job = parse_job(text, "halden.toml", check_files=False)
    numbers = job.numbers()
    assert [str(reference) for reference in numbers] == [
        "alpha.dalpha",
        "atomic.heavy_magnesium",
        "spectrum[1].fwhm",
        "region[1].zero_level",
        "component[1].velocity",
        "component[1].b",
        'component[1].logN["Fe II"]',
        'component[1].logN["Mg II"]',
        "component[2].velocity",
        "component[2].temperature",
        "component[2].b_turb",
        'component[2].logN["Fe II"]',
    ]
    starts = job.start_values()
    assert set(starts) == set(numbers)
    assert starts[Reference.parse("component[2].velocity")] == 2 * -12.3 + 30
    assert starts[Reference.parse("component[1].logN['Mg II']")] == 12.9 - 1 + 1
    assert numbers[Reference.parse("spectrum[1].fwhm")].is_free
    assert numbers[Reference.parse("component[1].b")].bounds("b") == (0.3, 100.0)
    # Each number is where its reference says, in the data and in the file.
    for reference in numbers:
        if reference.section not in ("alpha", "atomic"):
            value = job_to_data(job)
            for part in reference.path:
                value = value[part]


def test_missing_data_files_and_undefined_variables(tmp_path, monkeypatch):
    monkeypatch.setenv("HALDEN_DATA", "exposures")
    monkeypatch.delenv("HALDEN_NONE", raising=False)
    text = changed(
        {
            12: 'file = "${HALDEN_DATA}/red.fits"',
            14: 'error_file = "${HALDEN_NONE}/e.fits"',
            15: 'continuum_file = "${broken"',
            44: "restarts = -1",
        }
    )
    path = tmp_path / "halden.toml"
    with pytest.raises(JobError) as caught:
        parse_job(text, path)
    missing = tmp_path / "exposures" / "red.fits"
    head = f"{path}:"
    assert caught.value.faults == (
        f"{head}12: [[spectrum]] 1 'file': no such file: {str(missing)!r}",
        f"{head}14: [[spectrum]] 1 'error_file': the environment variable HALDEN_NONE is not "
        "defined",
        f"{head}15: [[spectrum]] 1 'continuum_file': text '${{broken' is no variable; "
        "write ${NAME}",
        f"{head}44: [fit] 'restarts': expected a count from 0 to 10000, found -1",
    )
    missing.parent.mkdir()
    missing.touch()
    job = parse_job(changed({12: 'file = "${HALDEN_DATA}/red.fits"'}), path)
    assert job.spectrum_path(0) == missing
    assert job.spectra[0].file == "${HALDEN_DATA}/red.fits"
    monkeypatch.delenv("HALDEN_DATA")
    with pytest.raises(JobError, match=r"halden.toml:12: \[\[spectrum\]\] 1 'file': the env"):
        job.spectrum_path(0)


@pytest.mark.parametrize("name", ["a\\u0000b", "x" * 5000, "/dev/null", "."])
def test_names_that_no_data_file_can_have(name):
    (message,) = faults_in(changed({12: f'file = "{name}"'}), check_files=True)
    assert message.startswith("halden.toml:12: [[spectrum]] 1 'file': no such file: ")


@pytest.mark.parametrize(
    ("content", "fragment"),
    [
        (b"\x89HDF\r\n\0\0", ": a binary file"),
        (b"schema = 1\nname = '\xe9'\n", ":2: not UTF-8"),
        (b"#" * 5_000_001, ": larger than 5 MB"),
        (b"schema = 1\nx = " + b"[" * 200_000, ":2: nested deeper than 32 levels"),
        (b"schema = 1\nx = " + b"{a=" * 50_000, ":2: nested deeper than 32 levels"),
    ],
)
def test_hostile_files(tmp_path, content, fragment):
    path = tmp_path / "job.toml"
    path.write_bytes(content)
    with pytest.raises(JobError) as caught:
        read_job(path)
    assert len(caught.value.faults) == 1
    assert caught.value.faults[0].startswith(f"{path}{fragment}")


def test_paths_that_are_no_job_files(tmp_path):
    with pytest.raises(JobError, match=r"none\.toml: cannot read the job file: No such file"):
        read_job(tmp_path / "none.toml")
    with pytest.raises(JobError, match="not a file"):
        read_job(tmp_path)


def test_a_flood_of_faults_is_cut_short():
    flood = "".join(f"key{number} = 1\n" for number in range(3000))
    faults = faults_in("schema = 1\n" + flood)
    assert any("2980 more unknown keys" in message for message in faults)
    faults = faults_in("schema = 1\n" + "[[region]]\n" * 2001)
    assert "halden.toml:2: [[region]]: 2001 entries; a job has at most 2000" in faults
    entries = "[[region]]\n" * 500
    faults = faults_in("schema = 1\n" + entries)
    assert len(faults) == 101
    assert faults[-1].endswith("more faults")


def test_data_in_memory_is_checked_alike():
    data = job_to_data(parse_job(EXAMPLE, "halden.toml", check_files=False))
    assert build_job(data) == parse_job(EXAMPLE, "halden.toml", check_files=False)
    data["component"][0]["b"] = -1
    with pytest.raises(JobError, match=r"^variant: \[\[component\]\] 1 'b': must be above 0"):
        build_job(data, name="variant")


JUNK = [
    *(None, True, 0, -1, 1e308, float("nan"), 10**400, "", "x", "Fe II", "${A", b"x", object()),
    *([], [[]], {}, [1, 2], [{}], [None], {1: 2}, {"Fe II": 1}, {"value": {"value": 1}}),
    *({"same_as": 3}, {"same_as": "component[1].b"}, {"same_as": "x"}),
]


def paths_in(data):
    for key, value in data.items() if isinstance(data, dict) else enumerate(data):
        yield (key,)
        if isinstance(value, dict | list):
            yield from ((key, *rest) for rest in paths_in(value))


@pytest.mark.parametrize("junk", JUNK, ids=lambda value: type(value).__name__)
def test_junk_in_any_place_is_a_fault_or_fits(junk):
    job = parse_job(EXAMPLE, "halden.toml", check_files=False)
    for path in paths_in(job_to_data(job)):
        data = job_to_data(job)
        parent = data
        for part in path[:-1]:
            parent = parent[part]
        parent[path[-1]] = junk
        try:
            build_job(data)
        except JobError as error:
            for message in error.faults:
                assert message.startswith("job: ")
                assert len(message) < 250
                assert "\n" not in message
                assert "Input should" not in message  # wording that is not ours


def test_reading_jobs_does_not_load_numerical_packages():
    # `--help` and the checks of a job must answer at once.
    code = (
        "import sys, fathomline.job; "
        "print([n for n in ('numpy', 'scipy', 'astropy', 'lmfit') if n in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
