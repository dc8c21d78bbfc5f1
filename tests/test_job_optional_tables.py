"""Tables that a job may do without: distortions, blends, coverings, departures in atomic data."""

import math

import pytest

from fathomline.errors import JobError
from fathomline.job import QUANTITIES, Number, Reference, build_job, job_to_data, parse_job

# The line numbers below refer to this text; `changed` replaces whole lines of it.
EXAMPLE = """\
schema = 1
absorber = { name = "Halden A", redshift = 1.15085 }

[[spectrum]]
id = "red"
file = "red.fits"
resolution = { fwhm = 5.2, slope = -0.15, pivot = 5500 }
exclude = [[5577, 5579.5], [6300, 6301]]
correlation = 0.12

[[spectrum]]
id = "blue"
file = "blue.fits"
resolution = { table = "lsf.ecsv" }
correlation = "measured"

[[distortion]]
spectrum = "red"
kind = "slope"
value = 0.0
sigma = 200.0
pivot = 6000
shared = "arm-red-2010"

[[distortion]]
spectrum = ["red", "blue"]
regions = [1, 3]
kind = "sawtooth"
sigma = inf
order_spacing = 60
pivot = 5000

[[distortion]]
spectrum = "blue"
kind = "sawtooth"
value = 50
order_edges = [4000, 4050.5, 4102]

[[distortion]]
spectrum = "blue"
kind = "table"
file = "drift.ecsv"
sigma = 0.3

[atomic]
folder = "tables"
abundances = { Si = "28", Fe = "terrestrial", Ti = { 46 = 0.25, 48 = 0.75 } }
heavy_magnesium = { value = 1.0, fixed = false }
heavy_magnesium_sigma = 0.5

[[atomic.override]]
transition = "Fe II 2382"
wavenumber = 41968.0654
q = 1505

[[atomic.override]]
transition = "Fe II 2600"
f = 0.2394
gamma = 2.7e8

[[region]]
transition = "Fe II 2382"
window = [-150.0, 220.0]
spectra = ["red"]

[[region]]
transition = "C IV 1550"
redshift = 1.7421
window = [-80, 80]

[[region]]
transition = "Mg II 2796"
window = [-100, 100]

[[component]]
velocity = -12.3
b = 4.2
logN = { "Fe II" = 12.9, "Mg II" = 13.2 }

[[component]]
velocity = 20
b = 3.1
logN."Fe II" = 12.1

[[blend]]
lines = ["C IV 1548", "C IV 1550"]
redshift = 1.7421
velocity = 3
b = 12.0
logN = 13.0

[[blend]]
wavelength = 5123.4
b = { same_as = "blend[1].b" }
logN = { same_as = 'component[1].logN["Fe II"]', offset = -1 }

[[blend]]
line = "Al II 1670"
redshift = 0.9
velocity = { same_as = "blend[1].velocity", ratio = 2 }
b = 7
logN = 12.0

[[covering]]
components = [1]
value = 0.9

[[covering]]
components = [2]
value = { same_as = "covering[1].value" }
"""


def changed(replacements):
    lines = EXAMPLE.splitlines()
    for number, text in replacements.items():
        lines[number - 1] = text
    return "\n".join(lines) + "\n"


def parsed(text=EXAMPLE):
    return parse_job(text, "halden.toml", check_files=False)


def test_the_example():
    job = parsed()
    red, blue = job.spectra
    assert red.exclude == ((5577.0, 5579.5), (6300.0, 6301.0))
    assert (red.correlation, blue.correlation) == (0.12, "measured")
    assert red.resolution.fwhm == Number(value=5.2, fixed=True)
    assert (red.resolution.slope, red.resolution.pivot) == (-0.15, 5500.0)
    assert blue.resolution.table == "lsf.ecsv"
    slope, saw, edges, table = job.distortions
    assert slope.spectra == ("red",)
    assert slope.regions is None
    assert (slope.unit, slope.is_free, slope.has_prior) == ("m/s per 1000 Angstrom", True, True)
    assert (saw.spectra, saw.regions, saw.sigma) == (("red", "blue"), (1, 3), math.inf)
    assert (saw.unit, saw.is_free, saw.has_prior) == ("m/s", True, False)
    assert edges.order_edges == (4000.0, 4050.5, 4102.0)
    assert (edges.value, edges.is_free, edges.has_prior) == (50.0, False, False)
    assert (table.value, table.unit) == (1.0, "factor")
    assert job.atomic.abundances["Ti"] == {"46": 0.25, "48": 0.75}
    assert job.atomic.heavy_magnesium.is_free
    assert job.atomic.overrides[0].wavenumber == 41968.0654
    assert (job.atomic.overrides[1].f, job.atomic.overrides[1].q) == (0.2394, None)
    assert job.regions[1].redshift == 1.7421
    assert [blend.transitions for blend in job.blends] == [
        ("C IV 1548", "C IV 1550"),
        (),
        ("Al II 1670",),
    ]
    assert job.blends[1].velocity == Number(value=0.0)
    assert job.coverings[0].components == (1,)
    assert job.locate("atomic", "override", 1, "f") == "halden.toml:58"


def test_what_is_not_given_is_not_there():
    lines = EXAMPLE.splitlines()
    text = "\n".join([*lines[:7], *lines[60:64], *lines[74:78]])
    job = parsed(text)
    assert job.distortions == job.blends == job.coverings == job.atomic.overrides == ()
    assert job.atomic.heavy_magnesium == Number(value=1.0, fixed=True)
    assert job.atomic.abundances == {}
    assert job.atomic_path() is None
    assert job.line_spread_path(0) is None
    assert job.spectra[0].correlation is None
    assert job.regions[0].redshift is None


MAGNESIUM = "abundances = { Mg = "

ZOO = [
    # Distortions
    ({18: ""}, 17, "[[distortion]] 1 'spectrum': missing"),
    (
        {18: 'spectrum = "green"'},
        18,
        "[[distortion]] 1 'spectrum': there is no spectrum 'green'; the ids are: red, blue",
    ),
    (
        {26: 'spectrum = ["red", "green"]'},
        26,
        "[[distortion]] 2 'spectrum[2]': there is no spectrum 'green'; the ids are: red, blue",
    ),
    (
        {26: 'spectrum = ["red", "red"]'},
        26,
        "[[distortion]] 2 'spectrum': spectrum 'red' is named twice",
    ),
    (
        {26: "spectrum = []"},
        26,
        "[[distortion]] 2 'spectrum': expected a spectrum id or an array of them, found an empty "
        "one; name the spectra",
    ),
    (
        {18: 'spectrum = "red arm"'},
        18,
        "[[distortion]] 1 'spectrum': expected an id of letters, digits and the characters _ . -, "
        "found text 'red arm'",
    ),
    (
        {27: "regions = [1, 4]"},
        27,
        "[[distortion]] 2 'regions[2]': there is no region 4; the last one is region 3",
    ),
    (
        {27: "regions = [0]"},
        27,
        "[[distortion]] 2 'regions[1]': expected a number counted from 1, found 0",
    ),
    ({27: "regions = [3, 3]"}, 27, "[[distortion]] 2 'regions': region 3 is named twice"),
    (
        {26: 'spectrum = "blue"'},
        27,
        "[[distortion]] 2 'regions[1]': region 1 uses only red, which the distortion does not "
        "name; its spectra are: blue",
    ),
    (
        {19: 'kind = "wiggle"'},
        19,
        '[[distortion]] 1 \'kind\': expected "shift" or "slope" or "sawtooth" or "table", '
        "found text 'wiggle'",
    ),
    (
        {20: "value = { value = 1, fixed = true }"},
        20,
        "[[distortion]] 1 'value': expected a number, found a table; sigma gives its freedom: "
        "0 fixes it, inf frees it",
    ),
    ({20: "value = inf"}, 20, "[[distortion]] 1 'value': expected a finite number, found inf"),
    (
        {21: "sigma = -1"},
        21,
        "[[distortion]] 1 'sigma': expected a number from 0, or inf, found -1",
    ),
    (
        {21: "sigma = -inf"},
        21,
        "[[distortion]] 1 'sigma': expected a number from 0, or inf, found -inf",
    ),
    ({21: "sigma = nan"}, 21, "[[distortion]] 1 'sigma': expected a finite number, found nan"),
    (
        {22: ""},
        17,
        "[[distortion]] 1: a slope needs a pivot, the wavelength in Angstrom where it is zero",
    ),
    (
        {22: "pivot = 0"},
        22,
        "[[distortion]] 1 'pivot': expected a wavelength above 0 Angstrom, found 0",
    ),
    (
        {19: 'kind = "shift"'},
        22,
        "[[distortion]] 1 'pivot': 'pivot' goes only with a slope, or with a sawtooth's "
        "order_spacing",
    ),
    (
        {31: ""},
        25,
        "[[distortion]] 2: order_spacing needs a pivot, the wavelength in Angstrom of one edge",
    ),
    (
        {30: "", 31: ""},
        25,
        "[[distortion]] 2: a sawtooth needs one of 'order_edges' and 'order_spacing' (Angstrom), "
        "found none",
    ),
    (
        {36: "order_spacing = 50"},
        33,
        "[[distortion]] 3: a sawtooth needs one of 'order_edges' and 'order_spacing' (Angstrom), "
        "found both",
    ),
    (
        {37: "order_edges = [4000, 4100]\npivot = 4000", 36: ""},
        38,
        "[[distortion]] 3 'pivot': 'pivot' goes only with a slope, or with a sawtooth's "
        "order_spacing",
    ),
    (
        {37: "order_edges = [4000, 4100, 4100]"},
        37,
        "[[distortion]] 3 'order_edges': edge 4100 follows 4100; write them in increasing order",
    ),
    (
        {37: "order_edges = [4000]"},
        37,
        "[[distortion]] 3 'order_edges': expected at least two edges in Angstrom, found 1",
    ),
    (
        {21: "order_spacing = 60"},
        21,
        "[[distortion]] 1 'order_spacing': 'order_spacing' goes only with kind = \"sawtooth\"",
    ),
    ({42: ""}, 39, "[[distortion]] 4: a table needs a file"),
    (
        {21: 'file = "drift.ecsv"'},
        21,
        "[[distortion]] 1 'file': 'file' goes only with kind = \"table\"",
    ),
    (
        {23: "shard = 1"},
        23,
        "[[distortion]] 1 'shard': unknown key 'shard'; did you mean 'shared'?",
    ),
    # Spectra
    (
        {8: "exclude = [[5577, 5579.5], [6301, 6300]]"},
        8,
        "[[spectrum]] 1 'exclude[2]': lower edge 6301 must be below upper edge 6300; "
        "write [lower, upper] in Angstrom",
    ),
    (
        {8: "exclude = [5577, [6300, 6301]]"},
        8,
        "[[spectrum]] 1 'exclude[1]': expected [lower, upper] in Angstrom, found the number 5577",
    ),
    (
        {9: "correlation = 0.5"},
        9,
        "[[spectrum]] 1 'correlation': expected a number between -0.5 and 0.5 or \"measured\", "
        "found the number 0.5",
    ),
    (
        {9: 'correlation = "estimated"'},
        9,
        "[[spectrum]] 1 'correlation': expected a number between -0.5 and 0.5 or \"measured\", "
        "found text 'estimated'",
    ),
    (
        {7: "resolution = { fwhm = 5.2, slope = -0.15 }"},
        7,
        "[[spectrum]] 1 'resolution.slope': 'slope' needs a pivot, the wavelength in Angstrom at "
        "which fwhm holds",
    ),
    (
        {7: "resolution = { fwhm = 5.2, pivot = 5500 }"},
        7,
        "[[spectrum]] 1 'resolution.pivot': 'pivot' goes only with slope; remove it, or add the "
        "slope",
    ),
    (
        {7: "resolution = { R = 58000, slope = -0.15, pivot = 5500 }"},
        7,
        "[[spectrum]] 1 'resolution.slope': 'slope' goes only with fwhm; write fwhm at the pivot "
        "in km/s",
    ),
    (
        {14: 'resolution = { table = "lsf.ecsv", fwhm = 5 }'},
        14,
        "[[spectrum]] 2 'resolution': expected one of 'fwhm' (km/s), 'R' and 'table', "
        "found 'fwhm' and 'table'",
    ),
    (
        {14: 'resolution = { table = "lsf.ecsv", error = 0.1 }'},
        14,
        "[[spectrum]] 2 'resolution.error': 'error' does not go with a table; it is that of fwhm "
        "or R",
    ),
    # Atomic data
    (
        {46: 'folder = ""'},
        46,
        "[atomic] 'folder': expected text, found nothing between the quotes",
    ),
    (
        {47: MAGNESIUM + '"24" }'},
        48,
        "[atomic] 'heavy_magnesium': does not go with abundances.Mg, which it would change; "
        "remove one of the two",
    ),
    (
        {47: MAGNESIUM + '"24" }', 48: "heavy_magnesium = 1.2", 49: ""},
        48,
        "[atomic] 'heavy_magnesium': does not go with abundances.Mg, which it would change; "
        "remove one of the two",
    ),
    (
        {47: "abundances = { Mg = 24 }", 48: "", 49: ""},
        47,
        '[atomic] \'abundances.Mg\': expected "terrestrial", a mass number such as "24", or a '
        'table such as { "24" = 0.8, "26" = 0.2 }, found the number 24',
    ),
    (
        {47: 'abundances = { Si = "solar" }'},
        47,
        '[atomic] \'abundances.Si\': expected "terrestrial" or a mass number such as "24", '
        "found text 'solar'",
    ),
    (
        {47: "abundances = { Si = { 28 = 0.9, 30 = 0.2 } }"},
        47,
        "[atomic] 'abundances.Si': the fractions add up to 1.1; they must add up to 1",
    ),
    (
        {47: "abundances = { Si = {} }"},
        47,
        "[atomic] 'abundances.Si': the fractions add up to 0; they must add up to 1",
    ),
    (
        {47: "abundances = { Si = { 28 = 1.1, 30 = 0 } }"},
        47,
        "[atomic] 'abundances.Si.28': expected a fraction from 0 to 1, found the number 1.1",
    ),
    (
        {47: "abundances = { Si = { heavy = 1 } }"},
        47,
        "[atomic] 'abundances.Si.heavy': expected a mass number such as \"24\", found text 'heavy'",
    ),
    (
        {47: 'abundances = { silicon = "28" }'},
        47,
        "[atomic] 'abundances.silicon': expected the symbol of an element such as \"Mg\", "
        "found text 'silicon'",
    ),
    (
        {48: "heavy_magnesium = 5", 49: ""},
        48,
        "[atomic] 'heavy_magnesium': must be at most 4.7, found 5",
    ),
    (
        {48: "heavy_magnesium = -0.1", 49: ""},
        48,
        "[atomic] 'heavy_magnesium': must be at least 0, found -0.1",
    ),
    (
        {48: ""},
        49,
        "[atomic] 'heavy_magnesium_sigma': needs a free heavy_magnesium; write "
        "heavy_magnesium = { value = 1.0, fixed = false }",
    ),
    (
        {53: "", 54: ""},
        51,
        "[[atomic.override]] 1: overrides nothing; write at least one of "
        "'wavenumber', 'f', 'gamma', 'q'",
    ),
    (
        {53: "wavenumber = 0"},
        53,
        "[[atomic.override]] 1 'wavenumber': expected a number above 0, found 0",
    ),
    ({58: "f = -0.1"}, 58, "[[atomic.override]] 2 'f': expected a number above 0, found -0.1"),
    ({59: "gamma = -1"}, 59, "[[atomic.override]] 2 'gamma': expected a number from 0, found -1"),
    (
        {57: 'transition = "Fe II 2382"'},
        57,
        "[[atomic.override]] 2 'transition': Fe II 2382 is already overridden in entry 1; "
        "put both together",
    ),
    (
        {51: "[atomic.override]", 56: "", 57: "", 58: "", 59: ""},
        51,
        "[[atomic.override]]: expected an array of tables; write [[atomic.override]] with two "
        "brackets",
    ),
    # Regions of other absorbers
    (
        {68: "redshift = 1.7422"},
        68,
        "[[region]] 2 'redshift': no [[blend]] has C IV 1550 at redshift 1.7422; add one, or "
        "remove the redshift if the line is the absorber's",
    ),
    (
        {67: 'transition = "C IV 1551"'},
        68,
        "[[region]] 2 'redshift': no [[blend]] has C IV 1551 at redshift 1.7421; add one, or "
        "remove the redshift if the line is the absorber's",
    ),
    ({68: "redshift = -1"}, 68, "[[region]] 2 'redshift': expected a number above -1, found -1"),
    (
        {68: ""},
        67,
        "[[region]] 2 'transition': no component has a logN of C IV; they have: Fe II, Mg II",
    ),
    # Blends
    (
        {93: ""},
        92,
        "[[blend]] 2: expected one of 'line', 'lines' and 'wavelength' (Angstrom), found none",
    ),
    (
        {99: "wavelength = 3173"},
        97,
        "[[blend]] 3: expected one of 'line', 'lines' and 'wavelength' (Angstrom), "
        "found 'line' and 'wavelength'",
    ),
    (
        {93: "wavelength = 5123.4\nredshift = 1"},
        94,
        "[[blend]] 2 'redshift': 'redshift' does not go with a wavelength, which is observed",
    ),
    ({99: ""}, 97, "[[blend]] 3: 'line' needs a redshift, that of the other absorber"),
    (
        {98: 'line = "AlII 1670"'},
        98,
        "[[blend]] 3 'line': expected an ion and a label such as \"Fe II 2382\", "
        "found text 'AlII 1670'",
    ),
    (
        {86: "lines = []", 67: 'transition = "Fe II 2586"', 68: ""},
        86,
        "[[blend]] 1 'lines': expected an array of transitions, found an empty one; "
        'write for example ["C IV 1548", "C IV 1550"]',
    ),
    (
        {86: 'lines = ["C IV 1550", "C IV 1550"]'},
        86,
        "[[blend]] 1 'lines': C IV 1550 is named twice",
    ),
    ({101: ""}, 97, "[[blend]] 3 'b': missing"),
    ({102: ""}, 97, "[[blend]] 3 'logN': missing"),
    ({101: "b = 0"}, 101, "[[blend]] 3 'b': must be above 0 km/s, found 0"),
    (
        {102: 'logN = { "Al II" = 12.0 }'},
        102,
        "[[blend]] 3 'logN': a blend has one logN, which all its lines share; write for example "
        "12.9",
    ),
    # Coverings
    (
        {105: "components = 1"},
        105,
        "[[covering]] 1 'components': expected an array of component numbers, found the number 1",
    ),
    (
        {105: "components = []"},
        105,
        "[[covering]] 1 'components': expected an array of component numbers, found an empty one; "
        "name the components",
    ),
    (
        {105: "components = [1, 3]"},
        105,
        "[[covering]] 1 'components[2]': there is no component 3; the last one is component 2",
    ),
    (
        {109: "components = [2, 1]"},
        109,
        "[[covering]] 2 'components[2]': component 1 is already in covering 1; "
        "a component is in one group at most",
    ),
    ({106: "value = 1.01"}, 106, "[[covering]] 1 'value': must be at most 1, found 1.01"),
    (
        {106: "value = { value = 0.5, min = -0.1 }"},
        106,
        "[[covering]] 1 'value': min must be at least 0, found -0.1",
    ),
    ({110: ""}, 108, "[[covering]] 2 'value': missing"),
    # Ties
    (
        {110: "value = { same_as = 'covering[1].value', ratio = 2 }"},
        110,
        "[[covering]] 2 'value': the tie gives 1.8; it must be at most 1",
    ),
    (
        {76: "velocity = { same_as = 'distortion[1].value' }"},
        76,
        "[[component]] 1 'velocity.same_as': distortion[1].value is a plain number, to which "
        "nothing can be tied; give one distortion several spectra to make them move together",
    ),
    (
        {101: "b = { same_as = 'blend[3].velocity' }"},
        101,
        "[[blend]] 3 'b.same_as': b is tied to velocity of blend[3].velocity; a tie joins two "
        "numbers of the same kind",
    ),
    (
        {101: "b = { same_as = 'atomic.heavy_magnesium' }"},
        101,
        "[[blend]] 3 'b.same_as': b is tied to heavy_magnesium of atomic.heavy_magnesium; a tie "
        "joins two numbers of the same kind",
    ),
    (
        {102: "logN = { same_as = 'blend[1].logN[\"C IV\"]' }"},
        102,
        "[[blend]] 3 'logN.same_as': 'logN' is one number of a blend; write blend[1].logN",
    ),
    (
        {102: "logN = { same_as = 'blend[4].logN' }"},
        102,
        "[[blend]] 3 'logN.same_as': blend[4].logN does not exist: the last one is blend[3]",
    ),
    (
        {110: "value = { same_as = 'covering[1].covering' }"},
        110,
        "[[covering]] 2 'value.same_as': a covering has no 'covering'; it may have value",
    ),
    (
        {48: "heavy_magnesium = { same_as = 'atomic.heavy_magnesium' }", 49: ""},
        48,
        "[atomic] 'heavy_magnesium.same_as': the ties form a circle: "
        "atomic.heavy_magnesium → atomic.heavy_magnesium",
    ),
]


@pytest.mark.parametrize(("replacements", "line", "message"), ZOO)
def test_zoo_of_faults(replacements, line, message):
    with pytest.raises(JobError) as caught:
        parsed(changed(replacements))
    assert caught.value.faults == (f"halden.toml:{line}: {message}",)


def test_faults_in_all_tables_are_reported_at_once():
    text = changed(
        {
            18: 'spectrum = "green"',
            27: "regions = [1, 9]",
            57: 'transition = "Fe II 2382"',
            59: "gamma = -1",
            64: 'spectra = "red"',
            68: "redshift = 2",
            99: "",
            109: "components = [1]",
        }
    )
    with pytest.raises(JobError) as caught:
        parsed(text)
    lines = [int(message.split(":")[1]) for message in caught.value.faults]
    # A blend with a fault of its own hides whether it was the one that region 2 is about; the
    # override with a fault hides its repetition.
    assert lines == [18, 27, 59, 64, 97, 109]


def test_a_tie_to_a_table_of_which_there_is_none():
    lines = EXAMPLE.splitlines()
    lines[76] = 'b = { same_as = "blend[1].b" }'
    with pytest.raises(JobError) as caught:
        parsed("\n".join([*lines[:16], *lines[60:64], *lines[74:78]]))
    assert caught.value.faults == (
        "halden.toml:23: [[component]] 1 'b.same_as': blend[1].b does not exist: the job has no "
        "blend",
    )


def test_references_and_ties():
    job = parsed()
    numbers = job.numbers()
    names = [str(reference) for reference in numbers]
    assert names[:3] == ["alpha.dalpha", "atomic.heavy_magnesium", "spectrum[1].fwhm"]
    assert names[-11:] == [
        *(f"blend[{count}].{key}" for count in (1, 2, 3) for key in ("velocity", "b", "logN")),
        "covering[1].value",
        "covering[2].value",
    ]
    for reference, name in zip(numbers, names, strict=True):
        if reference.section != "alpha":
            assert Reference.parse(name) == reference
        assert reference.quantity in QUANTITIES
    starts = {str(reference): value for reference, value in job.start_values().items()}
    assert starts["blend[2].b"] == 12.0
    assert starts["blend[2].logN"] == 12.9 - 1
    assert starts["blend[3].velocity"] == 2 * 3
    assert starts["covering[2].value"] == 0.9
    assert starts["atomic.heavy_magnesium"] == 1.0
    # Components may follow blends as well.
    text = changed(
        {82: "b = { same_as = 'blend[3].b' }", 81: "velocity = { same_as='blend[1].velocity' }"}
    )
    tied = {str(r): value for r, value in parsed(text).start_values().items()}
    assert (tied["component[2].b"], tied["component[2].velocity"]) == (7.0, 3.0)


def test_the_reference_of_a_distortion():
    reference = Reference.parse("distortion[2].value")
    assert reference == Reference("distortion", 1, "distortion")
    assert str(reference) == "distortion[2].value"
    assert reference.path == ("distortion", 1, "value")
    assert reference not in parsed().numbers()
    assert parsed().locate(*Reference.parse("covering[2].value").path) == "halden.toml:110"


def test_all_files_are_looked_for(tmp_path, monkeypatch):
    monkeypatch.setenv("HALDEN_TABLES", str(tmp_path / "mine"))
    path = tmp_path / "halden.toml"
    text = changed({46: 'folder = "${HALDEN_TABLES}/atoms"'})
    with pytest.raises(JobError) as caught:
        parse_job(text, path)
    atoms = tmp_path / "mine" / "atoms"
    assert caught.value.faults == (
        f"{path}:6: [[spectrum]] 1 'file': no such file: {str(tmp_path / 'red.fits')!r}",
        f"{path}:13: [[spectrum]] 2 'file': no such file: {str(tmp_path / 'blue.fits')!r}",
        f"{path}:14: [[spectrum]] 2 'resolution.table': no such file: "
        f"{str(tmp_path / 'lsf.ecsv')!r}",
        f"{path}:42: [[distortion]] 4 'file': no such file: {str(tmp_path / 'drift.ecsv')!r}",
        f"{path}:46: [atomic] 'folder': no such folder: {str(atoms)!r}",
    )
    for name in ("red.fits", "blue.fits", "lsf.ecsv", "drift.ecsv"):
        (tmp_path / name).touch()
    atoms.mkdir(parents=True)
    job = parse_job(text, path)
    assert [job.line_spread_path(i) for i in (0, 1)] == [None, tmp_path / "lsf.ecsv"]
    assert [job.distortion_path(i) for i in (0, 3)] == [None, tmp_path / "drift.ecsv"]
    assert job.atomic_path() == atoms
    monkeypatch.delenv("HALDEN_TABLES")
    with pytest.raises(JobError, match=r"halden.toml:46: \[atomic\] 'folder': the environment"):
        job.atomic_path()


JUNK = [
    *(None, True, 0, -1, 1e308, float("nan"), math.inf, 10**400, "", "x", "C IV 1548", "${A", b"x"),
    *([], [[]], {}, [1, 2], [{}], [None], {1: 2}, {"24": 10**400}, {"value": {"value": 1}}),
    *({"same_as": "blend[1].b"}, {"same_as": "distortion[1].value"}, object()),
]


def paths_in(data):
    for key, value in data.items() if isinstance(data, dict) else enumerate(data):
        yield (key,)
        if isinstance(value, dict | list):
            yield from ((key, *rest) for rest in paths_in(value))


@pytest.mark.parametrize("junk", JUNK, ids=lambda value: type(value).__name__)
def test_junk_in_any_place_is_a_fault_or_fits(junk):
    job = parsed()
    for path in paths_in(job_to_data(job)):
        data = job_to_data(job)
        parent = data
        for part in path[:-1]:
            parent = parent[part]
        parent[path[-1]] = junk
        try:
            again = build_job(data)
        except JobError as error:
            for message in error.faults:
                assert message.startswith("job: ")
                assert len(message) < 250
                assert "\n" not in message
                assert "Input should" not in message  # wording that is not ours
        else:
            assert build_job(job_to_data(again)) == again
