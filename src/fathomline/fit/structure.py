"""Find the velocity structure of an absorber: how many components, and where.

A *structure* is a list of clouds (velocity, width, one column density for each ion) and of
interlopers (lines in a single region that the other transitions do not share). The search starts
from nothing or from given clouds and repeats, with Δα/α free in every fit:

forward
    The residuals of all regions together are asked where one more cloud would lower χ². For a cloud
    of width b at velocity v the response of the flux to a small column density of one ion is
    d = ∂F/∂N / σ. With d⊥ the part of d that no free parameter of the present model can imitate,
    the best amplitude is N = d⊥·r / |d⊥|² and the gain in χ² is (d⊥·r)²/|d⊥|² for N > 0 (a score
    test, Rao 1948). Gains of ions add. The best places are tried by a full fit; the cloud stays
    when the criterion falls.
backward
    Clouds and single ions of clouds that the data hardly need are left out one at a time, with a
    full fit each; what does not pay stays out. Pairs too close to be told apart are merged, and so
    are clouds that overlap without a common ion.
rearranging
    When neither helps, the widest clouds are split in two, with something else left out if need be.

until nothing changes anything. Where the gain comes from one region and the others speak against a
cloud, an interloper is tried as well, and the criterion decides.

Criteria, for χ², n data and p free parameters: AIC = χ² + 2p; AICc adds 2p(p+1)/(n − p − 1)
(Hurvich & Tsai 1989, Biometrika 76, 297); BIC = χ² + p ln n (Schwarz 1978, Annals of Statistics 6,
461). To each comes 6 for a cloud and 12 for an interloper, because their places are the best of
many: without it AICc fits noise.
"""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from fathomline.constants import C_KMS, DEPTH_CONSTANT
from fathomline.fit.least_squares import Minimum, minimise
from fathomline.fit.result import aicc
from fathomline.fit.template import LOG_COLUMN_LIMITS, WIDTH_LIMITS, Cloud, Interloper, Template
from fathomline.model import AbsorberModel

__all__ = [
    "CRITERIA",
    "Found",
    "SearchSettings",
    "Step",
    "price_of_places",
    "search_structure",
]

Array = NDArray[np.float64]


def _aic(chi2: float, n_data: int, n_free: int) -> float:
    return chi2 + 2.0 * n_free


def _bic(chi2: float, n_data: int, n_free: int) -> float:
    return chi2 + n_free * math.log(max(n_data, 1))


CRITERIA: dict[str, Callable[[float, int, int], float]] = {
    "AICc": aicc,
    "AIC": _aic,
    "BIC": _bic,
}
"""Information criteria: (χ², number of data, number of free parameters) → value; low is good."""

_WIDTHS = (2.0, 4.0, 8.0)  # km/s of the clouds that the score test looks for
_START_T = 8000.0
_TRIES = 3  # places tried before the forward step gives up
_SEED_GAIN = 40.0  # gain of a cloud that may be added together with others at the start
_SEED_DISTANCE = 9.0  # km/s between those
_LEAST_GAIN = 4.0  # a gain below this cannot pay for a cloud under any criterion
_INTERLOPER_GAIN = 25.0  # of a line that may lie anywhere in any region, seen in one only
# The place of a cloud is the best of many, that of an interloper the best of many more; the
# criteria count parameters and know nothing of that. Noise alone gains 2 ln(number of places).
_CLOUD_COST = 6.0
_INTERLOPER_COST = 12.0
_LEFT_OUT = 10  # structures with something left out, tried before the backward step gives up
_SPLITS = 3  # clouds that are split in two, the widest first, before the search ends
_LEAST_CHANGE = 0.1  # of the criterion for a rearrangement: more than what a fit leaves to find
_TWINS = 1.5  # km/s between clouds that may be one
_WEAK = 12.0  # χ² that an ion or a cloud must be worth (Wald) to be left in peace


@dataclass(frozen=True, slots=True)
class SearchSettings:
    """How to search.

    Attributes
    ----------
    criterion : str
        One of `CRITERIA`.
    max_components : int
    seed : int
        Of the order in which places are tried and of start widths; 0 takes the best place first.
    thermal : bool
        Clouds have a temperature and a turbulent width instead of one b for all ions.
    max_iterations : int
        Of one fit.
    price : float
        Times the price of a place; 0 follows the criterion alone.

    """

    criterion: str = "AICc"
    max_components: int = 60
    seed: int = 0
    thermal: bool = False
    max_iterations: int = 60
    price: float = 1.0


@dataclass(frozen=True, slots=True)
class Step:
    """One accepted change: what it was, and the criterion after it."""

    action: str
    n_components: int
    n_interlopers: int
    criterion: float
    chi2: float
    dalpha: float
    seconds: float


@dataclass(frozen=True)
class Found:
    """A structure with its fit.

    Attributes
    ----------
    clouds, interlopers : tuple
        With their best values.
    model : AbsorberModel
    minimum : Minimum
    criterion : float
    history : tuple of Step
    complete : bool
        False when the search was interrupted.
    price : float
        As in `SearchSettings`.

    """

    clouds: tuple[Cloud, ...]
    interlopers: tuple[Interloper, ...]
    model: AbsorberModel
    minimum: Minimum
    criterion: float
    history: tuple[Step, ...] = field(default=())
    complete: bool = True
    price: float = 1.0

    @property
    def cost(self) -> float:
        """What the search lowers: the criterion, and a price for each place chosen among many."""
        return self.criterion + self.price * price_of_places(self.clouds, self.interlopers)

    @property
    def values(self) -> dict[str, float]:
        """Best value of every parameter, by name."""
        theta = self.model.parameters.expand(self.minimum.x)
        return dict(zip(self.model.parameters.names, theta.tolist(), strict=True))


def price_of_places(clouds: Sequence[Cloud], interlopers: Sequence[Interloper]) -> float:
    """What a structure pays on top of AICc because its places are the best of many."""
    return _CLOUD_COST * len(clouds) + _INTERLOPER_COST * len(interlopers)


class _Search:
    def __init__(
        self,
        template: Template,
        settings: SearchSettings,
        report: Callable[[Step], None] | None,
    ) -> None:
        self.template, self.settings, self.report = template, settings, report
        self.criterion = CRITERIA[settings.criterion]
        self.rng = np.random.default_rng(settings.seed)
        self.began = time.perf_counter()
        self.history: list[Step] = []
        self.n_fits = 0

    # -- fits ---------------------------------------------------------------------------------

    def fit(
        self,
        clouds: Sequence[Cloud],
        interlopers: Sequence[Interloper],
        start: dict[str, float] | None,
    ) -> Found:
        """Fit a structure; on a finer grid when the fitted lines need one."""
        model = self.template.model(clouds, interlopers, start)
        self.n_fits += 1
        x = model.parameters.start
        for _ in range(3):
            found = minimise(
                model.residuals_and_jacobian,
                x,
                model.parameters.lower,
                model.parameters.upper,
                max_iterations=self.settings.max_iterations,
                edm_tolerance=1e-4,
            )
            finer = model.resampled(found.x)
            if finer is None:
                break
            model, x = finer, found.x
        theta = model.parameters.expand(found.x)
        values = dict(zip(model.parameters.names, theta.tolist(), strict=True))
        n_data = found.residual.size
        return Found(
            tuple(_cloud(values, k, cloud) for k, cloud in enumerate(clouds)),
            tuple(_interloper(values, k, line) for k, line in enumerate(interlopers)),
            model,
            found,
            self.criterion(found.chi2, n_data, found.x.size),
            price=self.settings.price,
        )

    def record(self, found: Found, action: str) -> None:
        step = Step(
            action,
            len(found.clouds),
            len(found.interlopers),
            found.criterion,
            found.minimum.chi2,
            found.values[self.template.parameters[self.template.alpha].name],
            time.perf_counter() - self.began,
        )
        self.history.append(step)
        if self.report is not None:
            self.report(step)

    # -- forward ------------------------------------------------------------------------------

    def forward(self, found: Found) -> Found | None:
        """The structure with one more cloud or interloper, if that pays."""
        if len(found.clouds) >= self.settings.max_components:
            return None
        scores = _Scores(self.template, found)
        places = scores.clouds(_LEAST_GAIN)
        if self.settings.seed and len(places) > 1:
            # seeded searches choose among the good places at random, the better the likelier
            gains = np.array([gain for gain, _ in places[:6]])
            chances = np.sqrt(gains) / np.sqrt(gains).sum()
            order = self.rng.choice(gains.size, gains.size, replace=False, p=chances)
            places = [places[i] for i in order] + places[6:]
        best: Found | None = None
        for _, cloud in places[:_TRIES]:
            trial = self.fit([*found.clouds, self.dressed(cloud)], found.interlopers, found.values)
            if best is None or trial.cost < best.cost:
                best = trial
            if best.cost < found.cost - _LEAST_GAIN:
                break
        for _, line in scores.interlopers(_INTERLOPER_GAIN)[:1]:
            trial = self.fit(found.clouds, [*found.interlopers, line], found.values)
            if best is None or trial.cost < best.cost:
                best = trial
        return best if best is not None and best.cost < found.cost else None

    def dressed(self, cloud: Cloud) -> Cloud:
        """A cloud with a temperature where the search wants one, and a seeded start width."""
        width = cloud.b
        if self.settings.seed:
            width *= float(np.exp(0.3 * self.rng.standard_normal()))
        if not self.settings.thermal:
            return replace(cloud, b=width)
        return replace(cloud, b=max(0.8 * width, 0.6), temperature=_START_T)

    def seed_clouds(self, found: Found) -> Found:
        """Add all places that are clear at once, while there are any."""
        while True:
            chosen: list[Cloud] = []
            for gain, cloud in _Scores(self.template, found).clouds(_SEED_GAIN):
                near = [*chosen, *found.clouds]
                if gain > _SEED_GAIN and all(
                    abs(cloud.velocity - other.velocity) > _SEED_DISTANCE for other in near
                ):
                    chosen.append(self.dressed(cloud))
            room = self.settings.max_components - len(found.clouds)
            if not chosen or room <= 0:
                return found
            trial = self.fit([*found.clouds, *chosen[:room]], found.interlopers, found.values)
            if trial.cost >= found.cost:
                return found
            found = trial
            self.record(found, f"start with {len(chosen[:room])} more")

    # -- backward -----------------------------------------------------------------------------

    def backward(self, found: Found) -> Found | None:
        """The structure with something left out, if that pays."""
        for action in self.weak_parts(found):
            clouds, interlopers = action
            if not clouds:
                continue
            trial = self.fit(clouds, interlopers, found.values if clouds else None)
            if trial.cost < found.cost:
                return trial
        return None

    def weak_parts(self, found: Found) -> list[tuple[list[Cloud], list[Interloper]]]:
        """Structures that lack what the data hardly need, the most dispensable first."""
        worth = _worth(found)
        candidates: list[tuple[float, list[Cloud], list[Interloper]]] = []
        unseen = self.unseen_ions(found, worth)
        if unseen:
            fewer = [
                replace(
                    cloud,
                    log_columns={
                        ion: n for ion, n in cloud.log_columns.items() if (k, ion) not in unseen
                    },
                )
                for k, cloud in enumerate(found.clouds)
            ]
            candidates.append((-1.0, fewer, list(found.interlopers)))
        for k, cloud in enumerate(found.clouds):
            strongest = max(worth.get(_column(k, ion), 0.0) for ion in cloud.log_columns)
            if strongest < 4.0 * _WEAK or self.crowded(found, k):
                rest = _without(found.clouds, k)
                candidates.append((strongest, rest, list(found.interlopers)))
        for i, k in self.twins(found):
            merged = [c for j, c in enumerate(found.clouds) if j not in (i, k)]
            merged.append(_merged(found.clouds[i], found.clouds[k]))
            candidates.append((0.0, merged, list(found.interlopers)))
        for k in range(len(found.interlopers)):
            value = worth.get(f"blend[{k + 1}].logN", 0.0)
            if value < 4.0 * _WEAK:
                rest_lines = [line for i, line in enumerate(found.interlopers) if i != k]
                candidates.append((value, list(found.clouds), rest_lines))
        candidates.sort(key=lambda candidate: candidate[0])
        return [(clouds, lines) for _, clouds, lines in candidates[:_LEFT_OUT]]

    def twins(self, found: Found) -> list[tuple[int, int]]:
        """Pairs of clouds that may be one: nearly at one place, or without a common ion.

        The second kind are the halves of a cloud whose ions were left out one here and one there;
        each ion then has a velocity of its own and tells nothing about Δα/α.
        """
        pairs = []
        for i, k in self.overlaps(found):
            one, other = found.clouds[i], found.clouds[k]
            apart = abs(one.velocity - other.velocity)
            if apart < _TWINS or not _present(one) & _present(other):
                pairs.append((apart, (i, k)))
        return [pair for _, pair in sorted(pairs)[:2]]

    def rearranged(self, found: Found) -> Found | None:
        """The structure with a cloud split in two, and something else left out if need be.

        One more cloud where the lines are already deep changes the flux only in second order, which
        the score test does not see; and a cloud in the wrong place may stand in the way of two in
        the right ones.
        """
        if len(found.clouds) >= self.settings.max_components:
            return None
        widest = sorted(range(len(found.clouds)), key=lambda k: -found.clouds[k].b)
        for k in widest[:_SPLITS]:
            cloud = found.clouds[k]
            half = {ion: n - math.log10(2.0) for ion, n in cloud.log_columns.items()}
            halves = [
                replace(
                    cloud,
                    velocity=cloud.velocity + side * 0.6 * cloud.b,
                    b=max(0.75 * cloud.b, 1.05 * WIDTH_LIMITS[0]),
                    log_columns=half,
                )
                for side in (-1.0, 1.0)
            ]
            others = [c for i, c in enumerate(found.clouds) if i != k]
            trial = self.fit([*others, *halves], found.interlopers, found.values)
            if trial.cost < found.cost - _LEAST_CHANGE:
                return trial
            if trial.minimum.chi2 > found.minimum.chi2 - _LEAST_GAIN:
                continue
            for clouds, interlopers in self.weak_parts(trial)[:_SPLITS]:
                fewer = self.fit(clouds, interlopers, trial.values)
                if fewer.cost < found.cost - _LEAST_CHANGE:
                    return fewer
        return None

    def unseen_ions(self, found: Found, worth: dict[str, float]) -> set[tuple[int, str]]:
        """Cloud and ion where the ion is not seen and, at its usual share, could not be.

        An ion that should be seen and is not stays: without it the cloud of one ion could move
        against that of another, and the absorber would lose its hold on Δα/α.
        """
        if not found.clouds:
            return set()
        ions = self.template.ions
        table = np.full((len(found.clouds), len(ions)), np.nan)
        for k, cloud in enumerate(found.clouds):
            for i, ion in enumerate(ions):
                table[k, i] = cloud.log_columns.get(ion, np.nan)
        total = np.log10(np.nansum(10.0**table, axis=0))
        # an ion that is seen nowhere keeps its strongest cloud: its regions must have a line
        strongest = {
            ion: int(np.nanargmax(table[:, i]))
            for i, ion in enumerate(ions)
            if not np.isnan(table[:, i]).all()
        }
        unseen = set()
        for k, cloud in enumerate(found.clouds):
            own = {ion: worth.get(_column(k, ion), 0.0) for ion in cloud.log_columns}
            best = max(own, key=lambda ion: own[ion])
            for ion, value in cloud.log_columns.items():
                if ion == best or own[ion] >= _WEAK / 3.0 or strongest.get(ion) == k:
                    continue
                usual = cloud.log_columns[best] + total[ions.index(ion)] - total[ions.index(best)]
                seen = own[ion] * 10.0 ** (2.0 * (usual - value))
                if seen < _WEAK:
                    unseen.add((k, ion))
        # where clouds overlap the worth of each is small because the other can stand in for it;
        # two that share no ion would be one cloud in which each ion has a velocity of its own
        kept = [
            {ion for ion in cloud.log_columns if (k, ion) not in unseen}
            for k, cloud in enumerate(found.clouds)
        ]
        for i, k in self.overlaps(found):
            if not kept[i] & kept[k]:
                unseen = {(j, ion) for j, ion in unseen if j not in (i, k)}
        return unseen

    def overlaps(self, found: Found) -> list[tuple[int, int]]:
        """Pairs of clouds closer than the larger of their widths."""
        clouds = found.clouds
        return [
            (i, k)
            for i in range(len(clouds))
            for k in range(i)
            if abs(clouds[i].velocity - clouds[k].velocity) < max(clouds[i].b, clouds[k].b)
        ]

    def crowded(self, found: Found, k: int) -> bool:
        """Whether a cloud is too close to a neighbour, or too wide or narrow, to be trusted."""
        cloud = found.clouds[k]
        others = [c for i, c in enumerate(found.clouds) if i != k]
        close = any(abs(c.velocity - cloud.velocity) < 1.5 for c in others)
        return close or cloud.b <= 1.05 * WIDTH_LIMITS[0] or cloud.b >= 0.95 * WIDTH_LIMITS[1]

    # -- all ----------------------------------------------------------------------------------

    def run(self, clouds: Sequence[Cloud], interlopers: Sequence[Interloper]) -> Found:
        found = self.fit(clouds, interlopers, None)
        self.record(found, "start")
        complete = True
        try:
            found = self.seed_clouds(found)
            while True:
                better = self.forward(found)
                if better is not None:
                    found = better
                    self.record(found, "add")
                    continue
                better = self.backward(found)
                if better is not None:
                    found = better
                    self.record(found, "leave out")
                    continue
                better = self.rearranged(found)
                if better is None:
                    break
                found = better
                self.record(found, "rearrange")
        except KeyboardInterrupt:
            complete = False
        return replace(found, history=tuple(self.history), complete=complete)


def _present(cloud: Cloud) -> set[str]:
    """Ions of a cloud that a fit has not driven to nothing."""
    return {ion for ion, n in cloud.log_columns.items() if n > LOG_COLUMN_LIMITS[0] + 0.5}


def _without(clouds: Sequence[Cloud], k: int) -> list[Cloud]:
    """All clouds but one; ions that it alone has go to its nearest neighbour."""
    gone, rest = clouds[k], [c for i, c in enumerate(clouds) if i != k]
    left = {ion for cloud in rest for ion in cloud.log_columns}
    orphans = {ion: n for ion, n in gone.log_columns.items() if ion not in left}
    if rest and orphans:
        near = min(range(len(rest)), key=lambda i: abs(rest[i].velocity - gone.velocity))
        rest[near] = replace(rest[near], log_columns={**rest[near].log_columns, **orphans})
    return rest


def _merged(one: Cloud, other: Cloud) -> Cloud:
    """One cloud for two: all column, the width and place of the mean."""
    columns = {
        ion: math.log10(
            sum(10.0 ** c.log_columns[ion] for c in (one, other) if ion in c.log_columns)
        )
        for ion in {**one.log_columns, **other.log_columns}
    }
    return replace(
        one,
        velocity=0.5 * (one.velocity + other.velocity),
        b=0.5 * (one.b + other.b),
        log_columns=columns,
    )


def _column(k: int, ion: str) -> str:
    return f'component[{k + 1}].logN["{ion}"]'


def _cloud(values: dict[str, float], k: int, cloud: Cloud) -> Cloud:
    name = f"component[{k + 1}]"
    thermal = cloud.temperature is not None
    return Cloud(
        values[f"{name}.velocity"],
        values[f"{name}.b_turb" if thermal else f"{name}.b"],
        {ion: values[_column(k, ion)] for ion in cloud.log_columns},
        values[f"{name}.temperature"] if thermal else None,
    )


def _interloper(values: dict[str, float], k: int, line: Interloper) -> Interloper:
    name = f"blend[{k + 1}]"
    return replace(
        line,
        wavelength=line.wavelength * (1.0 + values[f"{name}.velocity"] / C_KMS),
        b=values[f"{name}.b"],
        log_strength=values[f"{name}.logN"],
    )


def _worth(found: Found) -> dict[str, float]:
    """Wald worth of each column density: χ² if it were zero in the quadratic model of N.

    With the error of ln N, (N/σ_N)² = 1/σ²(ln N).
    """
    jacobian = found.minimum.jacobian
    norm = np.sqrt((jacobian**2).sum(axis=0))
    norm = np.where(norm > 0.0, norm, 1.0)
    _, s, vt = np.linalg.svd(jacobian / norm, full_matrices=False)
    s = np.maximum(s, 1e-9 * s[0])
    sigma = np.sqrt(((vt.T / s) ** 2).sum(axis=1)) / norm
    return {
        name: 1.0 / (math.log(10.0) * sigma[i]) ** 2
        for i, name in enumerate(found.model.parameters.free_names)
        if ".logN" in name
    }


class _Scores:
    """Score test of clouds and interlopers against the residuals of a fitted structure."""

    def __init__(self, template: Template, found: Found) -> None:
        self.template, self.found = template, found
        model = found.model
        x = found.minimum.x
        n = model.n_data
        self.residual = found.minimum.residual[:n]
        jacobian = found.minimum.jacobian[:n]
        used = np.abs(jacobian).sum(axis=0) > 0.0
        norm = np.linalg.norm(jacobian[:, used], axis=0)
        u, s, _ = np.linalg.svd(jacobian[:, used] / norm, full_matrices=False)
        self.space = u[:, s > 1e-8 * s[0]]  # what the free parameters can imitate
        self.response = model.response(x)
        low = min(w[0] for w in template.windows.values())
        high = max(w[1] for w in template.windows.values())
        self.velocities = np.arange(low + 2.0, high - 1.0, 1.0)

    def _directions(self, segment: int, rest: float, strength: float, b: float) -> Array:
        """∂F/∂N/σ (n_pixels of the segment, n_velocities) of a line of one segment."""
        inverse, absorb = self.response[segment]
        s = (1.0 + self.template.redshift) * (1.0 + self.velocities / C_KMS)
        u = (C_KMS / b) * (np.multiply.outer(rest * inverse, s) - 1.0)
        tau = DEPTH_CONSTANT * strength * rest / b * np.exp(-(u**2))
        return absorb(tau)

    def clouds(self, least: float) -> list[tuple[float, Cloud]]:
        """Places where a cloud would lower χ² by more than `least`, the best first."""
        model, template = self.found.model, self.template
        n, n_v = model.n_data, self.velocities.size
        total = np.zeros((len(_WIDTHS), n_v))
        columns: dict[str, Array] = {}
        for ion in template.ions:
            amplitude = np.zeros((len(_WIDTHS), n_v))
            low, high = template.windows[ion]
            allowed = (self.velocities > low) & (self.velocities < high)
            for i, b in enumerate(_WIDTHS):
                d = np.zeros((n, n_v))
                for k, segment in enumerate(template.segments):
                    for key, lines in segment.lines:
                        if key == ion:
                            rows = slice(model.rows[k], model.rows[k + 1])
                            omega, strength, _ = lines.composite()
                            d[rows] += self._directions(k, 1e8 / omega, strength, b)
                d -= self.space @ (self.space.T @ d)
                square = np.einsum("ij,ij->j", d, d)
                with np.errstate(divide="ignore", invalid="ignore"):
                    best = np.where(square > 0.0, (self.residual @ d) / square, 0.0)
                best = np.where(allowed, best, 0.0)
                gain = np.maximum(best, 0.0) ** 2 * square
                total[i] += gain
                floor = np.where(square > 0.0, 0.5 / np.sqrt(np.maximum(square, 1e-300)), 0.0)
                amplitude[i] = np.maximum(best, floor)
            columns[ion] = amplitude
        return self._peaks(total, columns, least)

    def _peaks(
        self, total: Array, columns: dict[str, Array], least: float
    ) -> list[tuple[float, Cloud]]:
        widest = total.max(axis=0)
        peak = np.ones(widest.size, dtype=bool)
        peak[1:] &= widest[1:] >= widest[:-1]
        peak[:-1] &= widest[:-1] > widest[1:]
        found = []
        for j in np.flatnonzero(peak & (widest > least)):
            i = int(total[:, j].argmax())
            log_columns = {
                ion: float(np.log10(np.clip(amplitude[i, j], 1e10, 1e15)))
                for ion, amplitude in columns.items()
            }
            cloud = Cloud(float(self.velocities[j]), _WIDTHS[i], log_columns)
            found.append((float(widest[j]), cloud))
        return sorted(found, key=lambda place: -place[0])

    def interlopers(self, least: float) -> list[tuple[float, Interloper]]:
        """Lines in one region that the other regions do not share, the best first."""
        model, template = self.found.model, self.template
        found = []
        for k, segment in enumerate(template.segments):
            rows = slice(model.rows[k], model.rows[k + 1])
            rest = segment.centre / (1.0 + template.redshift)
            for b in _WIDTHS[1:]:
                d = self._directions(k, rest, 1.0, b)
                full = np.zeros((model.n_data, d.shape[1]))
                full[rows] = d
                full -= self.space @ (self.space[rows].T @ d)
                square = np.einsum("ij,ij->j", full, full)
                score = self.residual @ full
                with np.errstate(divide="ignore", invalid="ignore"):
                    gain = np.where((square > 0.0) & (score > 0.0), score**2 / square, 0.0)
                j = int(gain.argmax())
                if gain[j] > least:
                    amplitude = np.clip(score[j] / square[j], 1e9, 1e15)
                    wavelength = segment.centre * (1.0 + self.velocities[j] / C_KMS)
                    found.append(
                        (float(gain[j]), Interloper(k, wavelength, b, float(np.log10(amplitude))))
                    )
        return sorted(found, key=lambda place: -place[0])


def search_structure(
    template: Template,
    settings: SearchSettings | None = None,
    *,
    clouds: Sequence[Cloud] = (),
    interlopers: Sequence[Interloper] = (),
    report: Callable[[Step], None] | None = None,
) -> Found:
    """Search the structure of an absorber.

    Parameters
    ----------
    template : Template
    settings : SearchSettings, optional
    clouds, interlopers : sequences, optional
        Where to start; default: from nothing.
    report : callable, optional
        Called after each accepted change.

    Returns
    -------
    Found
        The best structure; `complete` is False when the search was interrupted from the keyboard.

    """
    return _Search(template, settings or SearchSettings(), report).run(clouds, interlopers)
