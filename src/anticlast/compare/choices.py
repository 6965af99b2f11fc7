"""All that can be chosen for one cutter and pattern, and the rows of cases that rounds of a search ask for."""

from __future__ import annotations

from dataclasses import dataclass, replace
from itertools import product

from anticlast.compare.cases import Case, Tilt, Way, directions, tilts
from anticlast.cutter import Cutter
from anticlast.records import Job, Operation


@dataclass(frozen=True, slots=True)
class Choices:
    """All that can be chosen for one cutter and pattern.

    Attributes
    ----------
    feeds : tuple of float
        Directions, best guess first, radians from part X.
    stands : tuple of dict
        Along each direction, the name of every tilt to the one that stands for all that come to the same there.
    """

    cutter: Cutter
    pattern: str
    scallop_mm: float
    way: Way
    feeds: tuple[float, ...]
    stands: tuple[dict[str, Tilt], ...]

    @classmethod
    def of(cls, job: Job, operation: Operation, cutter: Cutter, pattern: str, scallop_mm: float) -> Choices:
        """Return the choices of a cutter and pattern for an operation."""
        feeds = directions(job, operation, cutter, scallop_mm)
        stands = [tilts(job, operation, cutter, feed) for feed in feeds]
        return cls(cutter, pattern, scallop_mm, operation.way, tuple(feeds), tuple(stands))

    @property
    def family(self) -> tuple[int, str]:
        """Cutter and pattern."""
        return self.cutter.number, self.pattern

    def names(self, feed: int) -> list[str]:
        """Return the names of the tilts that differ along a direction."""
        return list(dict.fromkeys(tilt.name for tilt in self.stands[feed].values()))

    def case(self, feed: int, name: str, way: Way) -> Case:
        """Return the case along a direction in a tilt; in one that is not known, the first."""
        stands = self.stands[feed]
        tilt = stands.get(name) or next(iter(stands.values()))
        return Case(self.cutter.number, self.pattern, self.feeds[feed], tilt, way, self.scallop_mm)

    def along(self, feed: int, names: list[str] | None = None) -> list[Case]:
        """Return the cases along one direction in the tilts of these names, or in all."""
        wanted = self.names(feed) if names is None else names
        return list(dict.fromkeys(self.case(feed, name, self.way) for name in wanted))

    def all(self) -> list[Case]:
        """Return every combination."""
        ways: tuple[Way, ...] = ("both", "one-way")
        return [
            self.case(feed, name, way)
            for feed, way in product(range(len(self.feeds)), ways)
            for name in self.names(feed)
        ]

    def turned(self, best: Case | None) -> list[Case]:
        """Return the best tilt so far along all directions, and the other way; all directions if nothing could be cut."""
        name = self.names(0)[0] if best is None else best.tilt.name
        other: Way = "one-way" if self.way == "both" else "both"
        found = [self.case(feed, name, self.way) for feed in range(1, len(self.feeds))]
        return found if best is None else [*found, replace(best, way=other)]

    def tilted(self, best: Case | None) -> list[Case]:
        """Return all tilts along the best direction."""
        if best is None or best.direction_rad not in self.feeds:
            return []
        feed = self.feeds.index(best.direction_rad)
        return [] if feed == 0 else [replace(case, way=best.way) for case in self.along(feed)]
