"""How the page writes numbers: the job's units, sensible digits, and words where nothing was measured."""

from __future__ import annotations

import math
from dataclasses import dataclass
from html import escape

MM_PER_INCH = 25.4
UM_PER_MM = 1000.0
TENTHS_PER_MM = 1e4 / MM_PER_INCH  # ten-thousandths of an inch, the trade's "tenths"
NOT_MEASURED = "not measured"
SMALL_MM = 0.2  # lengths below this read better in um (or tenths) than in mm (or inch)


def text(value: object) -> str:
    """Escape anything for use as HTML text or inside a quoted attribute."""
    return escape(str(value), quote=True)


def sentence(said: str) -> str:
    """Start with a capital and end with a stop; the rest stays as it is."""
    said = said.strip()
    return said[:1].upper() + said[1:] + ("" if said.endswith((".", "!", "?")) else ".") if said else ""


def plain(value: float, digits: int) -> str:
    """Fixed digits without trailing zeros and without a negative zero; words where there is no number."""
    if math.isnan(value):
        return NOT_MEASURED
    if math.isinf(value):
        return "no limit"
    shown = f"{value:.{digits}f}"
    if "." in shown:
        shown = shown.rstrip("0").rstrip(".")
    return "0" if shown == "-0" else shown


def clock(seconds: float) -> str:
    """Time as a person says it: ``2 h 05 min 09 s``; below ten seconds with a tenth."""
    if not math.isfinite(seconds):
        return NOT_MEASURED
    if seconds < 9.95:
        return f"{seconds:.1f} s"
    whole = round(seconds)
    hours, rest = divmod(whole, 3600)
    minutes, rest = divmod(rest, 60)
    if hours:
        return f"{hours} h {minutes:02d} min {rest:02d} s"
    return f"{minutes} min {rest:02d} s" if minutes else f"{rest} s"


@dataclass(frozen=True, slots=True)
class Units:
    """The job's units for print: mm or mm/min in, text out, with its unit unless ``bare``.

    Attributes
    ----------
    inch : bool
        True when the job file, and so the program, is in inch.
    """

    inch: bool

    @property
    def name(self) -> str:
        """Unit of lengths."""
        return "in" if self.inch else "mm"

    @property
    def small_name(self) -> str:
        """Unit of scallop, gouge and chord heights: um, or the trade's tenths of a thousandth of an inch."""
        return "tenths" if self.inch else "µm"

    @property
    def scale(self) -> float:
        """Length in the job's units per mm."""
        return 1.0 / MM_PER_INCH if self.inch else 1.0

    @property
    def small_scale(self) -> float:
        """Small length unit per mm."""
        return TENTHS_PER_MM if self.inch else UM_PER_MM

    def _with(self, number: str, unit: str, bare: bool) -> str:
        return number if bare or number in (NOT_MEASURED, "no limit") else f"{number} {unit}"

    def length(self, value_mm: float, *, bare: bool = False) -> str:
        """Length: three digits after the point in mm, four in inch."""
        return self._with(plain(value_mm * self.scale, 4 if self.inch else 3), self.name, bare)

    def long(self, value_mm: float) -> str:
        """Path length: m from 10 m up, else mm; feet from 10 ft up, else inch."""
        if self.inch:
            inches = value_mm / MM_PER_INCH
            return f"{inches / 12:.1f} ft" if inches >= 120 else f"{plain(inches, 1)} in"
        return f"{value_mm / 1000:.2f} m" if value_mm >= 1e4 else f"{plain(value_mm, 0)} mm"

    def small(self, value_mm: float, *, bare: bool = False) -> str:
        """Scallop, gouge or chord height."""
        return self._with(plain(value_mm * self.small_scale, 2), self.small_name, bare)

    def feed(self, value_mm_min: float, *, bare: bool = False) -> str:
        """Feed along the path."""
        number = plain(value_mm_min * self.scale, 1 if self.inch else 0)
        return self._with(number, f"{self.name}/min", bare)

    def cutting_speed(self, value_mm_min: float, *, bare: bool = False) -> str:
        """Cutting speed at a diameter: m/min, or feet a minute."""
        if self.inch:
            return self._with(plain(value_mm_min / MM_PER_INCH / 12, 0), "ft/min", bare)
        return self._with(plain(value_mm_min / 1000, 1), "m/min", bare)

    def area(self, value_mm2: float) -> str:
        """Area."""
        number = plain(value_mm2 * self.scale**2, 4 if self.inch else 2)
        return self._with(number, f"{self.name}²", False)

    def gap(self, value_mm: float) -> str:
        """A clearance; infinite when nothing is near."""
        return "nothing near" if math.isinf(value_mm) else self.length(value_mm)

    def found(self, value: float, unit: str, limit: float) -> str:
        """A finding's worst, beside its limit; infinite when nothing came near."""
        return "nothing near" if math.isinf(value) else self.checked(value, unit, limit)

    def allowed(self, value: float, unit: str, worst: float) -> str:
        """A finding's limit, beside its worst; nan when none was set."""
        return "none set" if math.isnan(value) else self.checked(value, unit, worst)

    def checked(self, value: float, unit: str, beside: float) -> str:
        """A finding's figure: mm in the job's units, small ones in um or tenths; other units as they are.

        Parameters
        ----------
        value : float
            In ``unit``.
        unit : str
            As the finding states it.
        beside : float
            The figure it stands beside (worst against limit), so that both get the same unit.
        """
        if unit == "mm2":
            return self.area(value)
        if unit == "mm/min":
            return self.feed(value)
        if not unit and value == beside == 0:
            return "–"  # a check that is either met or not
        if unit != "mm":
            return self._with(plain(value, 3), unit, not unit)
        sizes = [abs(size) for size in (value, beside) if math.isfinite(size)]
        if sizes and max(sizes) < SMALL_MM and max(sizes) > 0:
            return self.small(value)
        return self.length(value)
