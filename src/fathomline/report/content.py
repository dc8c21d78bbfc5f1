"""What the report says, as plain text and tables; the template only arranges it.

Everything here is ordinary text: the template escapes it.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

from fathomline.atomic import Transition
from fathomline.fit import CAUTIONS, FLAGS
from fathomline.job.building import ALPHA, UNKNOWN
from fathomline.report.numbers import plain_number, value_with_error

if TYPE_CHECKING:
    from fathomline.job.measurement import Measurement
    from fathomline.spectra import Spectrum

__all__ = [
    "Cell",
    "Headline",
    "InputFile",
    "Status",
    "TableText",
    "atomic_table",
    "components_text",
    "headline",
    "input_files",
    "others_table",
    "restarts_table",
    "settings",
    "statuses",
    "structure_table",
    "transitions_text",
]

_NO_SOURCE = "the transition table itself, which names no source of its own for this quantity"

_FROM = {"file": "stated in the file", "argument": "stated in the job", "guess": "assumed"}

_VAGUE_COLUMN = 3.0  # dex; rounding log N to such an error would leave no digit of it

_WHY = {
    "fixed": "fixed",
    "at bound": "no error: at bound",
    "singular": "no error: not constrained",
}


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell: text, a remark in small print, and a share from 0 to 1 to draw as a bar."""

    text: str
    remark: str = ""
    share: float | None = None


@dataclass(frozen=True, slots=True)
class TableText:
    """A table ready for print; the first column names the rows."""

    caption: str
    head: tuple[tuple[str, str], ...]  # heading and unit
    rows: tuple[tuple[Cell, ...], ...]


@dataclass(frozen=True, slots=True)
class Headline:
    """The result in a line: `value` in ppm with its error, or the reason why it has none."""

    value: str
    error: str
    reason: str
    chi2_nu: str
    fit: str


@dataclass(frozen=True, slots=True)
class Status:
    """One flag: `level` is ``fault``, ``caution`` or ``note``."""

    flag: str
    level: str
    meaning: str


@dataclass(frozen=True, slots=True)
class InputFile:
    """One spectrum as the reader understood it."""

    name: str
    file: str
    facts: tuple[tuple[str, str], ...]
    guesses: tuple[str, ...]
    steps: tuple[str, ...]


def _cell(m: Measurement, name: str) -> Cell:
    """A parameter with its error, or with the reason why there is none."""
    if name not in m.fit.values:
        return Cell("—")
    value, error = m.fit.values[name], m.error(name)
    tie = m.built.model.parameters[m.built.model.parameters.position(name)].tie
    remark = f"tied to {tie.target}" if tie is not None else ""
    if isinstance(error, str):
        why = _WHY.get(error, error)
        return Cell(plain_number(value), f"{remark}; {why}" if remark else why)
    if ".logN[" in name and error > _VAGUE_COLUMN:
        vague = f"error {plain_number(error, 2)} dex: not constrained"
        return Cell(plain_number(value), f"{remark}; {vague}" if remark else vague)
    return Cell(value_with_error(value, error), remark)


def headline(m: Measurement) -> Headline:
    """Value, error and quality of the fit."""
    error = m.error(ALPHA)
    if isinstance(error, str):
        value, plus_minus, reason = plain_number(m.dalpha), "", _WHY.get(error, error)
    else:
        value, _, plus_minus = value_with_error(m.dalpha, error).partition(" ± ")
        reason = ""
        if value.startswith("("):  # a power of ten stands behind both
            value, plus_minus = value_with_error(m.dalpha, error), ""
    fit = m.fit
    chi2_nu = "—" if fit.chi2_nu is None else f"{fit.chi2_nu:.3f}"
    n_priors = f" and {fit.n_priors} priors" if fit.n_priors else ""
    return Headline(
        value,
        plus_minus,
        reason,
        chi2_nu,
        f"χ² = {fit.chi2:.2f} for {fit.ndof} degrees of freedom "
        f"({fit.n_data} pixels{n_priors}, {fit.n_free} free parameters)",
    )


def statuses(m: Measurement) -> list[Status]:
    """Every flag of the result with its meaning, the gravest first."""
    found = [
        Status(
            flag,
            "fault" if flag in FLAGS else "caution" if flag in CAUTIONS else "note",
            meaning,
        )
        for flag, meaning in m.flag_meanings().items()
    ]
    return sorted(found, key=lambda status: ("fault", "caution", "note").index(status.level))


def transitions_text(m: Measurement) -> TableText:
    """What each transition contributes."""
    rows = []
    for share, transition in zip(m.shares, m.built.transitions, strict=True):
        percent = 100.0 * share.information
        shown = f"{percent:.1f}" if percent >= 0.05 or percent == 0.0 else "< 0.1"
        rows.append(
            (
                Cell(share.transition),
                Cell(f"{transition.observed_wavelength(m.job.absorber.redshift):.2f}"),
                Cell(_signed(transition.sensitivity, 2)),
                Cell(str(share.n_pixels)),
                Cell(f"{share.snr:.0f}"),
                Cell(shown, share=min(max(share.information, 0.0), 1.0)),
                Cell(f"{share.chi2:.1f}"),
                Cell(f"{share.chi2 / share.n_pixels:.2f}" if share.n_pixels else "—"),
            )
        )
    return TableText(
        "What each transition contributes. The share of the information is that of the squared "
        "slope of the residuals with Δα/α, after what other parameters can imitate is taken out; "
        "the signal-to-noise ratio is the median per pixel at the continuum.",
        (
            ("Transition", ""),
            ("Observed", "Å"),
            ("Shift for Δα/α", "m/s per ppm"),
            ("Pixels", ""),
            ("S/N", ""),
            ("Information", "%"),
            ("χ²", ""),
            ("χ²/pixel", ""),
        ),
        tuple(rows),
    )


def _signed(value: float | None, decimals: int) -> str:
    if value is None:
        return "—"
    return f"{value:+.{decimals}f}".replace("-", "\N{MINUS SIGN}")


def components_text(m: Measurement) -> TableText:
    """Velocity, width and column densities of every component."""
    widths = {"b": ("b", "km/s"), "temperature": ("T", "K"), "b_turb": ("b turbulent", "km/s")}
    components = m.job.components
    used = [key for key in widths if any(getattr(c, key) is not None for c in components)]
    ions = list(dict.fromkeys(ion for c in components for ion in c.logN))
    rows = []
    for k in range(1, len(components) + 1):
        name = f"component[{k}]"
        rows.append(
            (
                Cell(str(k)),
                _cell(m, f"{name}.velocity"),
                *(_cell(m, f"{name}.{key}") for key in used),
                *(_cell(m, f'{name}.logN["{ion}"]') for ion in ions),
            )
        )
    return TableText(
        "Velocity components, numbered as in the figures, with 1σ errors from the covariance "
        "matrix. log N is the decimal logarithm of the column density.",
        (
            ("Component", ""),
            ("Velocity", "km/s"),
            *(widths[key] for key in used),
            *((f"log N({ion})", "cm⁻²") for ion in ions),
        ),
        tuple(rows),
    )


def structure_table(m: Measurement) -> TableText | None:
    """How the search came to the structure; None when components were given."""
    if not m.history:
        return None
    rows = tuple(
        (
            Cell(str(k)),
            Cell(step.action),
            Cell(str(step.n_components)),
            Cell(str(step.n_interlopers)),
            Cell(f"{step.criterion:.2f}"),
            Cell(f"{step.chi2:.2f}"),
            Cell(_signed(step.dalpha, 2)),
        )
        for k, step in enumerate(m.history, start=1)
    )
    return TableText(
        f"Accepted steps of the search, with Δα/α free in every fit. The criterion is "
        f"{m.asked.structure.criterion}.",
        (
            ("Step", ""),
            ("Change", ""),
            ("Components", ""),
            ("Interlopers", ""),
            ("Criterion", ""),
            ("χ²", ""),
            ("Δα/α", "ppm"),
        ),
        rows,
    )


def others_table(m: Measurement) -> TableText | None:
    """What was fitted or held besides components and continua: calibration, blends and the like."""
    rows = []
    for parameter in m.built.model.parameters:
        name = parameter.name
        if name.startswith(("alpha.", "component[")) or ".continuum[" in name:
            continue
        prior = parameter.prior
        held = "" if prior is None else f"{plain_number(prior.mean)} ± {plain_number(prior.sigma)}"
        rows.append((Cell(name), _cell(m, name), Cell(parameter.unit), Cell(held)))
    if not rows:
        return None
    return TableText(
        "Calibration, blends and other numbers besides the components and the continua. "
        "A prior is a Gaussian that takes part in the fit.",
        (("Parameter", ""), ("Value", ""), ("Unit", ""), ("Prior", "")),
        tuple(rows),
    )


def restarts_table(m: Measurement) -> TableText | None:
    """How the fit came back from other starts; None when no restart was asked for."""
    if not m.fit.restarts:
        return None
    rows = tuple(
        (
            Cell(str(k)),
            Cell(_signed(r.start_dalpha, 2)),
            Cell(_tiny(r.shift_sigma)),
            Cell(_tiny(r.chi2_change)),
            Cell(str(r.n_evaluations)),
            Cell(r.outcome),
        )
        for k, r in enumerate(m.fit.restarts, start=1)
    )
    return TableText(
        "Fits started again from other values. The shift of Δα/α is counted in its statistical "
        "error, Δχ² from the χ² of the result.",
        (
            ("Restart", ""),
            ("Start Δα/α", "ppm"),
            ("Shift of Δα/α", "σ"),
            ("Δχ²", ""),
            ("Evaluations", ""),
            ("Outcome", ""),
        ),
        rows,
    )


def _tiny(value: float) -> str:
    """Small differences: what lies below a ten-thousandth is not worth digits."""
    if abs(value) < 1e-4:
        return "< 0.0001"
    return _signed(value, 4) if abs(value) < 1e4 else plain_number(value)


def atomic_table(m: Measurement) -> tuple[TableText, list[str]]:
    """The laboratory numbers behind every line that the model holds, and their sources.

    The numbers are those of the transition table, not rounded; the sources are numbered from 1.
    Lines of which only the wavelength is known have none.
    """
    names = dict.fromkeys(
        lines.name
        for segment in m.built.model.segments
        for _, lines in segment.lines
        if not lines.name.startswith(UNKNOWN)
    )
    own = {transition.name: transition for transition in m.built.transitions}
    sources: dict[str, int] = {}
    rows = [
        _atomic_row(own.get(name) or m.built.atoms[name], name in own, sources) for name in names
    ]
    table = TableText(
        "Atomic data as used: vacuum wavenumber ω₀ of the whole transition, oscillator strength f, "
        "damping constant Γ, sensitivity q in ω = ω₀ + q[(α/α₀)² − 1], and the number of isotopic "
        "and hyperfine lines. Sources are listed below.",
        (
            ("Transition", ""),
            ("ω₀", "cm⁻¹"),
            ("f", ""),
            ("Γ", "s⁻¹"),
            ("q", "cm⁻¹"),
            ("Lines", ""),
            ("Sources", ""),
        ),
        tuple(rows),
    )
    return table, list(sources)


def _atomic_row(t: Transition, own: bool, sources: dict[str, int]) -> tuple[Cell, ...]:
    present = {
        "wavenumber": ("ω₀", True),
        "f": ("f", True),
        "gamma": ("Γ", t.gamma is not None),
        "q": ("q", t.q is not None),
    }
    cited: dict[int, list[str]] = {}
    for key, (symbol, there) in present.items():
        if there:
            source = t.sources.get(key, _NO_SOURCE)
            number = sources.setdefault(source, len(sources) + 1)
            cited.setdefault(number, []).append(symbol)
    return (
        Cell(t.name, "" if own else "also in a window"),
        Cell(_as_tabulated(t.wavenumber, t.wavenumber_err)),
        Cell(_as_tabulated(t.f)),
        Cell(plain_number(t.gamma)),
        Cell("—" if t.q is None else _as_tabulated(t.q, t.q_err)),
        Cell(str(len(t.components))),
        Cell("; ".join(f"{', '.join(symbols)} [{n}]" for n, symbols in cited.items())),
    )


def _as_tabulated(value: float, error: float | None = None) -> str:
    text = f"{value:.12g}" if error is None else f"{value:.12g} ± {error:.12g}"
    return text.replace("-", "\N{MINUS SIGN}")


def input_files(m: Measurement) -> list[InputFile]:
    """Every spectrum: what it is, and what the reader assumed."""
    return [
        _input_file(spectrum, table.file, m)
        for spectrum, table in zip(m.built.spectra, m.job.spectra, strict=True)
    ]


def _input_file(spectrum: Spectrum, file: str, m: Measurement) -> InputFile:
    reading = spectrum.reading
    wave = spectrum.wavelength
    index = [s.name for s in m.built.spectra].index(spectrum.name)
    masked = str(reading.masked_pixels)
    if reading.masked:
        masked += f" ({', '.join(f'{reason}: {n}' for reason, n in reading.masked.items())})"
    facts = [
        ("Format", reading.format),
        ("SHA-256", reading.file_digest or "not from a file"),
        ("Range", f"{wave[0]:.2f} to {wave[-1]:.2f} Å, {reading.pixels} pixels"),
        ("Masked pixels", masked),
        ("Columns", ", ".join(f"{role}: {name}" for role, name in reading.columns.items()) or "—"),
        ("Wavelength unit", _FROM.get(reading.unit_source, reading.unit_source)),
        ("Medium", _stated(reading.medium, reading.medium_source)),
        ("Frame", _stated(reading.frame, reading.frame_source)),
        ("Line-spread function", f"Gaussian, FWHM {_with_remark(_cell(m, _fwhm(m, index)))} km/s"),
    ]
    if reading.barycentric_velocity is not None:
        facts.append(("Barycentric velocity applied", f"{reading.barycentric_velocity:.4f} km/s"))
    facts += [
        (f"SHA-256 of the {role} file", entry.get("digest", entry.get("sha256", "—")))
        for role, entry in reading.companions.items()
    ]
    return InputFile(spectrum.name, file, tuple(facts), reading.guesses, reading.steps)


def _stated(value: str, source: str) -> str:
    return f"{value}, {_FROM.get(source, source)}"


def _fwhm(m: Measurement, index: int) -> str:
    return f"spectrum[{index + 1}].fwhm"


def _with_remark(cell: Cell) -> str:
    return f"{cell.text} ({cell.remark})" if cell.remark else cell.text


def settings(m: Measurement) -> list[tuple[str, str]]:
    """How the fit was run and how it ended."""
    fit, job = m.fit, m.job
    spacings: Sequence[float] = m.built.model.spacings
    fine = f"{min(spacings):.3g} to {max(spacings):.3g} km/s" if spacings else "—"
    return [
        ("Started", m.started.isoformat(timespec="seconds")),
        ("Job digest (SHA-256)", m.digest),
        ("Solver", f"{fit.solver}: {fit.message}"),
        ("Iterations and evaluations", f"{fit.n_iterations} and {fit.n_evaluations}"),
        ("Estimated distance to the minimum", f"{plain_number(fit.edm, 2)} in χ²"),
        ("Condition of the scaled Jacobian", plain_number(fit.covariance.condition, 3)),
        ("Restarts and seed", f"{job.fit.restarts} and {job.fit.seed}"),
        ("AICc", f"{fit.aicc:.2f}"),
        ("Isotopic and hyperfine structure", job.atomic.structure),
        ("Fine grid of the model", f"{fine}, made finer {m.resamplings} times during the fit"),
        ("Time", ", ".join(f"{stage} {seconds:.2f} s" for stage, seconds in m.timings.items())),
    ]
