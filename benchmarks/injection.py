"""Injection and recovery: what a fit makes of a known error, with and without a term for it.

    python -m benchmarks.injection

prints the tables of docs/injection-and-recovery.md. Spectra come from `fathomline.job.synthesis`,
which shares no code with the fitted model; distortions, line-spread functions and isotopic mixtures
are written out here once more, so that a fault in those of the package would show.
"""

from __future__ import annotations

import math
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf

from fathomline.atomic import Transition, load_atomic_data
from fathomline.fit import FitResult, FitSettings, fit_model
from fathomline.job import Job, parse_job
from fathomline.job.building import ALPHA, build_model
from fathomline.job.demo import demo_clouds
from fathomline.job.inputs import line_spread, load_atoms
from fathomline.job.simulation import synthetic_grid
from fathomline.job.synthesis import Cloud, synthetic_transmission
from fathomline.model import AbsorberModel
from fathomline.spectra import Spectrum

Array = NDArray[np.float64]
Basis = Callable[[Array], Array]

TRUTH = 6.0  # Δα/α, ppm
SEEDS = 50
SNR = 100.0  # per pixel of all exposures together
PIXEL = 2.0  # km/s
FWHM = 5.2  # km/s
REDSHIFT = 1.15085
WINDOW = (-120.0, 110.0)  # km/s
PLAIN = f"{{ fwhm = {FWHM} }}"

# Fe II 1608 moves against the other Fe II lines (q of the other sign) and stands at the blue end,
# Al II 1670 and Mg II hardly move and stand at both ends: Δα/α is no monotonic function of
# wavelength, so neither a slope nor a sawtooth can imitate it. Without the two blue lines a free
# slope takes three quarters of the information on Δα/α.
LINES = (
    *("Fe II 1608", "Al II 1670", "Fe II 2344", "Fe II 2374", "Fe II 2382"),
    *("Fe II 2586", "Fe II 2600", "Mg II 2796", "Mg II 2803"),
)
DEMO_LINES = tuple(name for name in LINES if name not in ("Fe II 1608", "Al II 1670"))


def clouds(**changes: float) -> list[Cloud]:
    """The demo's clouds with Al II, 1.2 dex below Mg II."""
    return [
        replace(
            cloud,
            log_columns={**cloud.log_columns, "Al II": cloud.log_columns["Mg II"] - 1.2},
            **changes,
        )
        for cloud in demo_clouds()
    ]


@dataclass(frozen=True)
class Case:
    """What is injected, and what the job that models it has more than the one that leaves it out.

    `numbers` are the injected numbers that a fit has a parameter for, with their true values.
    `distortions` (m/s against Å, by spectrum), `profile` (of km/s and Å), `isotopes` and `clouds`
    make the spectra; `modelled`, `resolution`, `atomic` and `thermal` are keys of the job that
    models the case; `files` are files that it needs.
    """

    key: str
    title: str
    modelled: str = ""
    numbers: Mapping[str, float] = field(default_factory=dict)
    distortions: Mapping[str, Basis] = field(default_factory=dict)
    profile: Callable[..., Array] | None = None
    isotopes: Callable[[Transition], Transition] | None = None
    clouds: Sequence[Cloud] = field(default_factory=clouds)
    spectra: Mapping[str, Sequence[str]] = field(default_factory=lambda: {"one": LINES})
    resolution: str = PLAIN
    atomic: str = ""
    thermal: bool = False
    files: Mapping[str, str] = field(default_factory=dict)
    unit: str = ""


def job_text(case: Case, *, with_term: bool, atomic: str = "") -> str:
    """A job whose start values are the truth rounded to 1 km/s and 0.1 dex."""
    rows = [
        "schema = 1",
        "[absorber]",
        f'name = "{case.key}"',
        f"redshift = {REDSHIFT}",
        case.atomic if with_term else atomic,
    ]
    for name in case.spectra:
        spread = case.resolution if with_term else PLAIN
        rows += ["[[spectrum]]", f'id = "{name}"', 'file = "x.fits"', f"resolution = {spread}"]
    for line in dict.fromkeys(line for lines in case.spectra.values() for line in lines):
        holders = [f'"{name}"' for name, lines in case.spectra.items() if line in lines]
        rows += ["[[region]]", f'transition = "{line}"', f"window = [{WINDOW[0]}, {WINDOW[1]}]"]
        rows.append(f"spectra = [{', '.join(holders)}]")
    ions = {line.rpartition(" ")[0] for lines in case.spectra.values() for line in lines}
    for k, cloud in enumerate(case.clouds):
        rows += ["[[component]]", f"velocity = {cloud.velocity:.0f}.0"]
        if case.thermal and with_term:
            for key, start in (("temperature", "6000.0"), ("b_turb", "2.5")):
                rows.append(f"{key} = " + (f'{{ same_as = "component[1].{key}" }}' if k else start))
        else:
            rows.append(f"b = {cloud.width(40.0) / 1e3:.0f}.0")
        columns = (f'"{i}" = {n:.1f}' for i, n in cloud.log_columns.items() if i in ions)
        rows.append(f"logN = {{ {', '.join(columns)} }}")
    return "\n".join([*rows, case.modelled if with_term else ""])


def transmission(case: Case, job: Job, spectrum: str, edges: Array, dalpha: float) -> Array:
    """Noise-free flux of a spectrum about its lines; 1 elsewhere."""
    ions = {ion for cloud in case.clouds for ion in cloud.log_columns}
    lines = [
        t if case.isotopes is None else case.isotopes(t)
        for t in load_atomic_data().transitions
        if t.ion in ions
    ]
    flux = np.ones(edges.size - 1)
    for name in case.spectra[spectrum]:
        own = next(t for t in lines if t.name == name)
        centre = own.observed_wavelength(job.absorber.redshift)
        first, last = np.searchsorted(edges, [centre * (1 - 5e-4), centre * (1 + 5e-4)])
        first, last = max(first, 0), min(last + 1, edges.size)
        flux[first : last - 1] = synthetic_transmission(
            edges[first:last],
            [t for t in lines if abs(t.wavelength / own.wavelength - 1.0) < 7e-3],
            case.clouds,
            redshift=REDSHIFT,
            fwhm=FWHM,
            dalpha_ppm=dalpha,
            distortion=case.distortions.get(spectrum),
            profile=None if case.profile is None else partial(case.profile, wavelength=centre),
        )
    return flux


def noise_free_model(case: Case, text: str, folder: Path, dalpha: float) -> AbsorberModel:
    """The model of a job on noise-free data with the errors of noisy ones."""
    for name, content in case.files.items():
        (folder / name).write_text(content, encoding="utf-8")
    job = parse_job(text, folder / "job.toml", check_files=False)
    atoms = load_atoms(job)
    spectra = []
    for i, table in enumerate(job.spectra):
        edges = synthetic_grid(job, atoms, table.id, PIXEL)
        flux = transmission(case, job, table.id, edges, dalpha)
        sigma = math.sqrt(len(job.spectra)) / SNR
        spectra.append(
            Spectrum.from_arrays(
                np.sqrt(edges[:-1] * edges[1:]),
                flux,
                np.full(flux.size, sigma),
                np.ones(flux.size),
                lsf=line_spread(table.resolution, job, i),
                name=table.id,
            )
        )
    return build_model(job, spectra, atoms).model


def fitted(model: AbsorberModel) -> tuple[AbsorberModel, FitResult]:
    """A fit without restarts, on a grid that is fine enough for its outcome."""
    settings, start = FitSettings(restarts=0), None
    while True:
        fit = fit_model(model, settings, start=start)
        assert fit.converged, fit.message
        finer = model.resampled(fit.free)
        if finer is None:
            return model, fit
        model, start = finer, fit.free


def with_noise(model: AbsorberModel, seed: Sequence[int]) -> AbsorberModel:
    """The same model on data with noise, the same for every model of these pixels."""
    rng = np.random.default_rng(seed)
    segments = [
        replace(s, data=s.data + s.error * rng.standard_normal(s.data.size)) for s in model.segments
    ]
    return AbsorberModel(
        model.redshift,
        model.parameters,
        model.alpha,
        model.components,
        segments,
        coverings=model.coverings,
        heavy=model.heavy,
    )


@dataclass(frozen=True)
class Ensemble:
    """A number over the noise seeds: true value, fit to noise-free data, values and errors."""

    truth: float
    noise_free: float
    values: Array
    errors: Array

    @property
    def pulls(self) -> Array:
        return (self.values - self.truth) / self.errors

    @property
    def bias(self) -> float:
        return float(self.values.mean() - self.truth)

    @property
    def bias_error(self) -> float:
        return float(self.values.std(ddof=1) / math.sqrt(self.values.size))


@dataclass(frozen=True)
class Recovery:
    """Outcome of a case: Δα/α and the injected numbers when modelled, Δα/α when left out."""

    case: Case
    alpha: Ensemble
    numbers: dict[str, Ensemble]
    left_out: Ensemble
    chi2: float  # mean χ²/ν when modelled
    chi2_left_out: float
    seconds: float


def recover(case: Case, seeds: int = SEEDS) -> Recovery:
    """Fit a case with and without its term over noise seeds."""
    started = time.perf_counter()
    found: dict[str, list[tuple[float, float]]] = {}
    noise_free: dict[str, float] = {}
    chi2: dict[bool, list[float]] = {True: [], False: []}
    with tempfile.TemporaryDirectory() as folder:
        for with_term in (True, False):
            text = job_text(case, with_term=with_term)
            clean, exact = fitted(noise_free_model(case, text, Path(folder), TRUTH))
            names = {name: name for name in (ALPHA, *case.numbers)}
            if not with_term:
                names = {"left out": ALPHA}
            noise_free |= {key: exact.values[name] for key, name in names.items()}
            for seed in range(seeds):
                _, fit = fitted(with_noise(clean, [seed, *case.key.encode()]))
                chi2[with_term].append(fit.chi2_nu or 0.0)
                for key, name in names.items():
                    sigma = fit.sigma(name)
                    assert sigma is not None, f"{case.key}, seed {seed}: {name} has no error"
                    found.setdefault(key, []).append((fit.values[name], sigma))
    truths = {ALPHA: TRUTH, "left out": TRUTH, **case.numbers}
    ensembles = {
        key: Ensemble(truths[key], noise_free[key], *np.array(rows).T)
        for key, rows in found.items()
    }
    return Recovery(
        case,
        ensembles[ALPHA],
        {name: ensembles[name] for name in case.numbers},
        ensembles["left out"],
        float(np.mean(chi2[True])),
        float(np.mean(chi2[False])),
        time.perf_counter() - started,
    )


# -- the cases ------------------------------------------------------------------------------

ORDER, FIRST_ORDER = 70.0, 3472.0  # Å; no line stands on an edge of an order


def sawtooth(wavelength: Array) -> Array:
    """From −1 to +1 across each order."""
    part = (wavelength - FIRST_ORDER) / ORDER
    return 2.0 * (part - np.floor(part)) - 1.0


def skewed(velocity: Array, wavelength: float) -> Array:
    """A profile from a Gaussian at 3400 Å to a skewed one at 6100 Å, with its mean at 0.

    Its FWHM is 5.2 to 5.4 km/s throughout.

    The skewed one is Azzalini's skew-normal density (1985, Scand. J. Statist. 12, 171) of shape 3.
    """

    def density(shape: float, scale: float) -> Array:
        delta = shape / math.sqrt(1.0 + shape**2)
        x = velocity / scale + delta * math.sqrt(2.0 / math.pi)
        return np.exp(-0.5 * x**2) * (1.0 + erf(shape * x / math.sqrt(2.0))) / scale

    part = (wavelength - 3400.0) / (6100.0 - 3400.0)
    return (1.0 - part) * density(0.0, 2.2083) + part * density(3.0, 3.7026)


def skewed_table() -> str:
    velocity = np.linspace(-20.0, 20.0, 401)
    rows = zip(velocity, skewed(velocity, 3400.0), skewed(velocity, 6100.0), strict=True)
    return "\n".join(["velocity,3400,6100", *(f"{v:.2f},{a:.9e},{b:.9e}" for v, a, b in rows)])


def heavy_magnesium(factor: float) -> Callable[[Transition], Transition]:
    """Magnesium with `factor` times the terrestrial ²⁵Mg and ²⁶Mg; the rest is ²⁴Mg."""

    def mixed(transition: Transition) -> Transition:
        if transition.ion != "Mg II":
            return transition
        heavy = sum(c.fraction for c in transition.structure if c.mass_number != 24)
        return replace(
            transition,
            structure=tuple(
                replace(c, fraction=c.fraction * factor)
                if c.mass_number != 24
                else replace(c, fraction=1.0 - heavy * factor)
                for c in transition.structure
            ),
        )

    return mixed


_SHIFT = '[[distortion]]\nspectrum = "two"\nkind = "shift"\nsigma = inf\n'
_THERMAL = [replace(c, b_turb=2.0, temperature=8000.0) for c in clouds()]

CASES = (
    Case(
        "slope",
        "slope of 300 m/s per 1000 Å",
        modelled='[[distortion]]\nspectrum = "one"\nkind = "slope"\npivot = 5000.0\nsigma = inf\n',
        numbers={"distortion[1].value": 300.0},
        distortions={"one": lambda w: 300.0 * (w - 5000.0) / 1000.0},
        unit="m/s per 1000 Å",
    ),
    Case(
        "shift",
        "250 m/s between two spectra of all lines",
        modelled=_SHIFT,
        numbers={"distortion[1].value": 250.0},
        distortions={"two": lambda w: np.full_like(w, 250.0)},
        spectra={"one": LINES, "two": LINES},
        unit="m/s",
    ),
    Case(
        "partial shift",
        "250 m/s, the second spectrum without Mg II",
        modelled=_SHIFT,
        numbers={"distortion[1].value": 250.0},
        distortions={"two": lambda w: np.full_like(w, 250.0)},
        spectra={"one": LINES, "two": LINES[:-2]},
        unit="m/s",
    ),
    Case(
        "sawtooth",
        "sawtooth of 150 m/s, orders of 70 Å",
        modelled=(
            '[[distortion]]\nspectrum = "one"\nkind = "sawtooth"\nsigma = inf\n'
            f"pivot = {FIRST_ORDER}\norder_spacing = {ORDER}\n"
        ),
        numbers={"distortion[1].value": 150.0},
        distortions={"one": lambda w: 150.0 * sawtooth(w)},
        unit="m/s",
    ),
    Case(
        "line spread",
        "line-spread function skewed towards the red end",
        profile=skewed,
        resolution='{ table = "lsf.csv" }',
        files={"lsf.csv": skewed_table()},
    ),
    Case(
        "thermal",
        "T = 8000 K and b_turb = 2 km/s",
        numbers={"component[1].temperature": 8000.0, "component[1].b_turb": 2.0},
        clouds=_THERMAL,
        thermal=True,
        unit="K, km/s",
    ),
    Case(
        "magnesium 24",
        "²⁴Mg only",
        atomic='[atomic]\nabundances = { Mg = "24" }',
        isotopes=heavy_magnesium(0.0),
    ),
    Case(
        "heavy magnesium",
        "twice the terrestrial ²⁵Mg and ²⁶Mg",
        atomic="[atomic]\nheavy_magnesium = { value = 1.0, fixed = false }",
        numbers={"atomic.heavy_magnesium": 2.0},
        isotopes=heavy_magnesium(2.0),
        unit="terrestrial",
    ),
)

# -- isotopic structure left out, against column density ------------------------------------

COLUMNS = (
    11.0,
    11.5,
    12.0,
    12.5,
    13.0,
    13.5,
    14.0,
    14.5,
    14.75,
    15.0,
)  # log N(Mg II), strongest component


@dataclass(frozen=True)
class Point:
    """Bias of Δα/α, ppm, of a fit with composite lines, and what it fits."""

    column: float
    depth: float  # optical depth of Mg II 2796 in the middle of the strongest component
    bias: float
    sigma: float
    with_structure: float  # bias of the fit with structure


def structure_scan(columns: Sequence[float] = COLUMNS) -> list[Point]:
    """One noise-free absorber for each column density, all clouds stronger by the same factor."""
    strongest = max(c.log_columns["Mg II"] for c in demo_clouds())
    mg = load_atomic_data()["Mg II 2796"]
    points = []
    for column in columns:
        scaled = [
            replace(c, log_columns={i: n + column - strongest for i, n in c.log_columns.items()})
            for c in demo_clouds()
        ]
        case = Case("structure", "", clouds=scaled, spectra={"one": DEMO_LINES})
        fits = []
        for atomic in ('[atomic]\nstructure = "composite"', ""):
            text = job_text(case, with_term=False, atomic=atomic)
            fits.append(fitted(noise_free_model(case, text, Path(), TRUTH))[1])
        b = next(c for c in scaled if c.log_columns["Mg II"] == column).b_turb
        # τ0 = √π e²/(m_e c) N f λ/b, 1.497e-2 in cgs (for instance Draine 2011, equation 9.10)
        depth = 1.497e-2 * 10.0**column * mg.f * mg.wavelength * 1e-8 / (b * 1e5)
        biases = [fit.values[ALPHA] - TRUTH for fit in fits]
        points.append(Point(column, depth, biases[0], fits[0].sigma(ALPHA) or 0.0, biases[1]))
    return points


# -- tables ---------------------------------------------------------------------------------


def recovery_table(recoveries: Sequence[Recovery]) -> str:
    rows = [
        "| injected | σ(Δα/α), ppm | pull of Δα/α: mean, width | injected number: mean ± σ (truth) "
        "| its pull: mean, width | bias left out, ppm | the same, noise-free | χ²/ν: modelled, "
        "left out |",
        "|---|---|---|---|---|---|---|---|",
    ]
    for r in recoveries:
        numbers = [
            f"{e.values.mean():.4g} ± {float(f'{e.errors.mean():.2g}'):g} ({e.truth:g})"
            for e in r.numbers.values()
        ]
        pulls = [f"{e.pulls.mean():+.2f}, {e.pulls.std(ddof=1):.2f}" for e in r.numbers.values()]
        rows.append(
            f"| {r.case.title} | {r.alpha.errors.mean():.2f} | {r.alpha.pulls.mean():+.2f}, "
            f"{r.alpha.pulls.std(ddof=1):.2f} "
            f"| {'; '.join([*numbers[:-1], *(f'{n} {r.case.unit}' for n in numbers[-1:])]) or '—'} "
            f"| {'; '.join(pulls) or '—'} "
            f"| {r.left_out.bias:+.2f} ± {r.left_out.bias_error:.2f} "
            f"| {r.left_out.noise_free - TRUTH:+.2f} | {r.chi2:.3f}, {r.chi2_left_out:.3f} |"
        )
    return "\n".join(rows)


def structure_table(points: Sequence[Point]) -> str:
    rows = [
        "| log N(Mg II) | τ0 of Mg II 2796 | bias with composites, ppm | σ at S/N 100, ppm "
        "| bias with structure, ppm |",
        "|---|---|---|---|---|",
    ]
    for p in points:
        rows.append(
            f"| {p.column:g} | {p.depth:.3g} | {p.bias:+.3f} | {p.sigma:.2f} "
            f"| {p.with_structure:+.4f} |"
        )
    return "\n".join(rows)


def main() -> None:
    started = time.perf_counter()
    print(recovery_table([recover(case) for case in CASES]))
    print()
    print(structure_table(structure_scan()))
    print(f"\n{time.perf_counter() - started:.0f} s")


if __name__ == "__main__":
    main()
