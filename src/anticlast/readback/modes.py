"""What a control remembers from line to line: modes, position, offsets, tool and spindle."""

from __future__ import annotations

from dataclasses import dataclass, field

MM_PER_INCH = 25.4

Six = tuple[float, float, float, float, float, float]
ZERO: Six = (0.0, 0.0, 0.0, 0.0, 0.0, 0.0)
Origin = tuple[float | None, ...]
UNKNOWN: Origin = (None,) * 6


@dataclass(slots=True)
class State:
    """Modal state between two lines.

    Attributes
    ----------
    at : six floats
        Where the controlled point stands: mm and degrees in the active work offset, G92 shifts taken out.
    shift : six floats
        G92 offsets: program coordinate + shift = work coordinate (3.5.18).
    stored_shift : six floats or None
        What G92.3 brings back; None while the program has not set it.
    known : int
        Bit i set: axis i stands where the program said, not where it happened to be.
    named : int
        Bit i set: the program has used the word of axis i.
    motion : int or None
        Motion code times ten; None before the program states one.
    feed : float
        F in force; 0 when none was given since the feed mode changed.
    origins : tuple
        Machine coordinates of the nine work offsets, G54 first, each of six values; None where nobody told.
    turning : int
        1 under M3, -1 under M4, 0 stopped.
    depth, clear, dwell : float or None
        Words of the running canned cycle that stay in force from line to line (3.5.16).
    repeats : int
        Repeats of canned cycles beyond the first of each line, so far.
    stated : frozenset of str
        Modal groups that the program has stated.
    told : frozenset of str
        Groups it relied on without stating them, reported already.
    """

    at: Six = ZERO
    shift: Six = ZERO
    stored_shift: Six | None = None
    known: int = 0
    named: int = 0
    motion: int | None = None
    plane: int = 17
    inch: bool = False
    absolute: bool = True
    inverse: bool = False
    feed: float = 0.0
    speed: float = 0.0
    turning: int = 0
    selected: int | None = None
    tool: int = 0
    offset_h: int = 0
    system: int = 1
    origins: tuple[Origin, ...] = (UNKNOWN,) * 9
    coolant: int = 0
    retract_to_r: bool = False
    depth: float | None = None
    clear: float | None = None
    dwell: float | None = None
    repeats: int = 0
    ended: bool = False
    moved: bool = False
    stated: frozenset[str] = field(default_factory=frozenset)
    told: frozenset[str] = field(default_factory=frozenset)

    @property
    def factor(self) -> float:
        """Millimetres in one length unit of the program."""
        return MM_PER_INCH if self.inch else 1.0

    @property
    def spindle_rpm(self) -> float:
        """Signed speed: positive clockwise (M3)."""
        return self.turning * self.speed

    def snapshot(self) -> State:
        """Return a copy; every field is immutable, so a shallow one does."""
        twin = State()
        for name in _FIELDS:
            setattr(twin, name, getattr(self, name))
        return twin


_FIELDS = tuple(State.__slots__)
