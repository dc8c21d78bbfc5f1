"""Faults between the tables of a job, each of them valid in itself.

A table that has faults of its own is None here; what would depend on it is not checked, so that
one mistake gives one message.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

from fathomline.job.absorption_tables import Blend, Component, Covering, Region
from fathomline.job.atomic_tables import Atomic
from fathomline.job.instrument_tables import Distortion, Spectrum
from fathomline.job.number import Number, Reference, tie_faults
from fathomline.job.table import Fault, Table, plain

__all__ = ["Tables", "cross_faults", "numbers_of"]


@dataclass(frozen=True)
class Tables:
    """The tables of a job that refer to each other; None stands for one with faults."""

    dalpha: Number
    atomic: Atomic
    spectra: Sequence[Spectrum | None]
    distortions: Sequence[Distortion | None]
    regions: Sequence[Region | None]
    components: Sequence[Component | None]
    blends: Sequence[Blend | None]
    coverings: Sequence[Covering | None]


def numbers_of(tables: Tables) -> dict[Reference, Number]:
    """All numbers of the model by reference, in the order that `Job.numbers` documents."""
    found: dict[Reference, Number | None] = {
        Reference("alpha", 0, "dalpha"): tables.dalpha,
        Reference("atomic", 0, "heavy_magnesium"): tables.atomic.heavy_magnesium,
    }
    for index, spectrum in enumerate(tables.spectra):
        if spectrum is not None:
            found[Reference("spectrum", index, "fwhm")] = spectrum.resolution.fwhm
    for index, region in enumerate(tables.regions):
        if region is not None:
            found[Reference("region", index, "zero_level")] = region.zero_level
    for index, component in enumerate(tables.components):
        if component is not None:
            for quantity in ("velocity", "b", "temperature", "b_turb"):
                found[Reference("component", index, quantity)] = getattr(component, quantity)
            for ion, number in component.logN.items():
                found[Reference("component", index, "logN", ion)] = number
    for index, blend in enumerate(tables.blends):
        if blend is not None:
            for quantity in ("velocity", "b", "logN"):
                found[Reference("blend", index, quantity)] = getattr(blend, quantity)
    for index, covering in enumerate(tables.coverings):
        if covering is not None:
            found[Reference("covering", index, "covering")] = covering.value
    return {reference: number for reference, number in found.items() if number is not None}


def cross_faults(tables: Tables) -> Iterator[Fault]:
    """Faults between tables: names that are repeated or lead nowhere, and ties."""
    yield from _spectrum_faults(tables)
    yield from _distortion_faults(tables)
    yield from _region_faults(tables)
    yield from _covering_faults(tables)
    arrays: dict[str, Sequence[Table | None]] = {
        "spectrum": tables.spectra,
        "distortion": tables.distortions,
        "region": tables.regions,
        "component": tables.components,
        "blend": tables.blends,
        "covering": tables.coverings,
    }
    yield from tie_faults(
        numbers_of(tables),
        {"atomic": 1} | {section: len(entries) for section, entries in arrays.items()},
        {
            (section, index)
            for section, entries in arrays.items()
            for index, entry in enumerate(entries)
            if entry is None
        },
    )


def _spectrum_faults(tables: Tables) -> Iterator[Fault]:
    """Each id once; each id that a region or a distortion names exists."""
    known: dict[str, int] = {}
    for index, spectrum in enumerate(tables.spectra):
        if spectrum is None:
            continue
        if spectrum.id in known:
            yield Fault(
                ("spectrum", index, "id"),
                f"{spectrum.id!r} is already the id of spectrum {known[spectrum.id] + 1}",
            )
        known.setdefault(spectrum.id, index)
    if not tables.spectra or None in tables.spectra:
        return
    named = [
        ("region", "spectra", index, () if region is None else region.spectra or ())
        for index, region in enumerate(tables.regions)
    ] + [
        ("distortion", "spectrum", index, () if distortion is None else distortion.spectra)
        for index, distortion in enumerate(tables.distortions)
    ]
    for section, key, index, names in named:
        for place, name in enumerate(names):
            if name not in known:
                # A distortion of one spectrum is written without brackets.
                single = section == "distortion" and len(names) == 1
                yield Fault(
                    (section, index, key) if single else (section, index, key, place),
                    f"there is no spectrum {name!r}; the ids are: {', '.join(known)}",
                )


def _distortion_faults(tables: Tables) -> Iterator[Fault]:
    """The regions of a distortion exist and use one of its spectra."""
    for index, distortion in enumerate(tables.distortions if tables.regions else ()):
        for place, count in enumerate(() if distortion is None else distortion.regions or ()):
            path = ("distortion", index, "regions", place)
            if count > len(tables.regions):
                yield Fault(path, _absent("region", count, len(tables.regions)))
                continue
            region = tables.regions[count - 1]
            if region is None or region.spectra is None or distortion is None:
                continue
            if not set(region.spectra) & set(distortion.spectra):
                yield Fault(
                    path,
                    f"region {count} uses only {', '.join(region.spectra)}, which the distortion "
                    f"does not name; its spectra are: {', '.join(distortion.spectra)}",
                )


def _region_faults(tables: Tables) -> Iterator[Fault]:
    """Something absorbs in each region."""
    if tables.components and None not in tables.components:
        ions = dict.fromkeys(ion for entry in tables.components if entry for ion in entry.logN)
        for index, region in enumerate(tables.regions):
            if region is not None and region.redshift is None and region.ion not in ions:
                yield Fault(
                    ("region", index, "transition"),
                    f"no component has a logN of {region.ion}; they have: {', '.join(ions)}",
                )
    if None in tables.blends:
        return
    for index, region in enumerate(tables.regions):
        if region is None or region.redshift is None:
            continue
        if not any(
            blend.redshift == region.redshift and region.transition in blend.transitions
            for blend in tables.blends
            if blend is not None
        ):
            yield Fault(
                ("region", index, "redshift"),
                f"no [[blend]] has {region.transition} at redshift {plain(region.redshift)}; "
                "add one, or remove the redshift if the line is the absorber's",
            )


def _covering_faults(tables: Tables) -> Iterator[Fault]:
    """The components of a group exist, and are in no other group."""
    group: dict[int, int] = {}
    for index, covering in enumerate(tables.coverings if tables.components else ()):
        for place, count in enumerate(() if covering is None else covering.components):
            path = ("covering", index, "components", place)
            if count > len(tables.components):
                yield Fault(path, _absent("component", count, len(tables.components)))
            elif count in group:
                yield Fault(
                    path,
                    f"component {count} is already in covering {group[count] + 1}; "
                    "a component is in one group at most",
                )
            group.setdefault(count, index)


def _absent(section: str, count: int, size: int) -> str:
    return f"there is no {section} {count}; the last one is {section} {size}"
