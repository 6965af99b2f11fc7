"""The materials table: cutting speeds, feeds per tooth, cutting forces and cautions, each with its source."""

from __future__ import annotations

import tomllib
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from typing import Any


@dataclass(frozen=True, slots=True)
class Span:
    """A range of published or remembered values, and where it comes from."""

    low: float
    high: float
    source: str


@dataclass(frozen=True, slots=True)
class CuttingForce:
    """Specific cutting force kc over chip thickness h, by one source: kc = kc11 h**-mc + ktc + kte / h.

    Attributes
    ----------
    kc11_n_mm2, mc : float
        Kienzle's law; ``kc11`` is the force at h = 1 mm on 1 mm of width. Zero if the other form is used.
    ktc_n_mm2, kte_n_mm : float
        Shearing and edge terms of the mechanistic law. Zero if Kienzle's is used.
    source : str
    """

    kc11_n_mm2: float
    mc: float
    ktc_n_mm2: float
    kte_n_mm: float
    source: str

    def at(self, thickness_mm: float) -> float:
        """Specific cutting force, N/mm^2, at a chip thickness > 0 mm."""
        return self.kc11_n_mm2 * thickness_mm**-self.mc + self.ktc_n_mm2 + self.kte_n_mm / thickness_mm


@dataclass(frozen=True, slots=True)
class Material:
    """One row of the table.

    Attributes
    ----------
    name : str
        As a job file names it.
    aliases : tuple of str
        Other names that a job file may use.
    cutting_speed_m_min : Span
        For solid carbide end mills.
    feed_per_tooth_share : Span
        Feed per tooth over cutter diameter, a guideline: times the diameter in mm it is mm per tooth.
    forces : tuple of CuttingForce
        Published laws of the specific cutting force; empty if none is known.
    modulus_gpa : Span or None
        Young's modulus.
    cautions : tuple of str
        What to mind: dust, fire, chips, work holding.
    """

    name: str
    aliases: tuple[str, ...]
    cutting_speed_m_min: Span
    feed_per_tooth_share: Span
    forces: tuple[CuttingForce, ...]
    modulus_gpa: Span | None
    cautions: tuple[str, ...]

    def specific_force_n_mm2(self, thickness_mm: float) -> tuple[float, float] | None:
        """Lowest and highest specific cutting force that the sources give; None without a source.

        Parameters
        ----------
        thickness_mm : float
            Chip thickness, > 0.
        """
        values = [force.at(thickness_mm) for force in self.forces]
        return (min(values), max(values)) if values else None


def _plain(name: str) -> str:
    return " ".join(name.lower().replace("-", " ").replace("_", " ").split())


def _span(row: dict[str, object], key: str) -> Span | None:
    value = row.get(key)
    if value is None:
        return None
    assert isinstance(value, dict), "tests hold the shipped table to this form"
    low, high = value["range"]
    return Span(float(low), float(high), str(value["source"]))


def _force(row: dict[str, Any]) -> CuttingForce:
    kc11, mc, ktc, kte = (float(row.get(key, 0.0)) for key in ("kc11", "mc", "ktc", "kte"))
    return CuttingForce(kc11, mc, ktc, kte, str(row["source"]))


@cache
def table() -> tuple[Material, ...]:
    """All rows, in the order of the table."""
    data = tomllib.loads(files("anticlast").joinpath("materials.toml").read_text(encoding="utf-8"))
    rows: list[Material] = []
    for row in data["material"]:
        speed, feed = _span(row, "cutting_speed"), _span(row, "feed_per_tooth")
        assert speed is not None, "tests hold the shipped table to this form"
        assert feed is not None, "tests hold the shipped table to this form"
        rows.append(
            Material(
                name=row["name"],
                aliases=tuple(row.get("aliases", ())),
                cutting_speed_m_min=speed,
                feed_per_tooth_share=feed,
                forces=tuple(_force(force) for force in row.get("force", ())),
                modulus_gpa=_span(row, "modulus"),
                cautions=tuple(row.get("cautions", ())),
            )
        )
    return tuple(rows)


@cache
def _by_name() -> dict[str, Material]:
    return {_plain(name): row for row in table() for name in (row.name, *row.aliases)}


def names() -> tuple[str, ...]:
    """Names of all materials, without aliases."""
    return tuple(row.name for row in table())


def all_names() -> tuple[str, ...]:
    """Names and aliases of all materials, lower case with single blanks."""
    return tuple(_by_name())


def find(name: str) -> Material | None:
    """Material of a name or alias; capitals, hyphens and underscores do not matter. None if there is none."""
    return _by_name().get(_plain(name))


def material(name: str) -> Material:
    """Material of a name or alias that is known to be in the table.

    Raises
    ------
    KeyError
        If it is not; ask ``find`` where that can happen.
    """
    return _by_name()[_plain(name)]
