"""The words of RS-274 as NISTIR 6556 lists them: letters, codes, modal groups, and their sections.

Source: T. Kramer, F. Proctor, E. Messina, "The NIST RS274NGC Interpreter - Version 3", NISTIR 6556, 17 August
2000. All section numbers in this folder are that report's. G codes are held times ten, so that 54 is 540 and
59.1 is 591.
"""

from __future__ import annotations

from typing import Final

LETTERS: Final = frozenset("abcdfghijklmnpqrstxyz")  # 3.3.2, Table 3
AXES: Final = "xyzabc"
MAX_LINE: Final = 256  # characters, 3.3
MAX_NUMBER: Final = (
    1e9  # ours: no machine has a travel, feed or speed beyond it, and squares of it stay finite
)
LAST_PARAMETER: Final = 5399  # 3.2.1
FIRST_RESERVED: Final = 5061  # from here on the control keeps probed points, homes and work offsets, 3.2.1
INTEGER_SLACK: Final = 1e-4  # 3.3.2.1

MOTION: Final = "motion"
ONE_SHOT: Final = "non-modal"

_G_GROUPS: Final = {
    MOTION: (0, 10, 20, 30, 382, 800, 810, 820, 830, 840, 850, 860, 870, 880, 890),
    "plane": (170, 180, 190),
    "distance": (900, 910),
    "feed mode": (930, 940),
    "units": (200, 210),
    "cutter compensation": (400, 410, 420),
    "length offset": (430, 490),
    "retract": (980, 990),
    "work offset": (540, 550, 560, 570, 580, 590, 591, 592, 593),
    "path": (610, 611, 640),
    ONE_SHOT: (40, 100, 280, 300, 530, 920, 921, 922, 923),
}  # 3.4, Table 4
G_GROUP: Final = {code: group for group, codes in _G_GROUPS.items() for code in codes}

M_GROUP: Final = {
    **dict.fromkeys((0, 1, 2, 30, 60), "stopping"),
    6: "tool change",
    **dict.fromkeys((3, 4, 5), "spindle"),
    **dict.fromkeys((7, 8, 9), "coolant"),
    **dict.fromkeys((48, 49), "overrides"),
}  # 3.4, Table 4

USES_AXES_ONCE: Final = frozenset((100, 280, 300, 920))  # group 0 codes that take axis words, 3.4
ARCS: Final = frozenset((20, 30))
CYCLES: Final = frozenset((810, 820, 830, 840, 850, 860, 870, 880, 890))
SYSTEM: Final = {540: 1, 550: 2, 560: 3, 570: 4, 580: 5, 590: 6, 591: 7, 592: 8, 593: 9}
PATH_MODE: Final = {610: "G61", 611: "G61.1", 640: "G64"}

_SECTIONS: Final = {
    "3.5.1": (0,),
    "3.5.2": (10,),
    "3.5.3": (20, 30),
    "3.5.4": (40,),
    "3.5.5": (100,),
    "3.5.6": (170, 180, 190),
    "3.5.7": (200, 210),
    "3.5.8": (280, 300),
    "3.5.9": (382,),
    "3.5.10": (400, 410, 420),
    "3.5.11": (430, 490),
    "3.5.12": (530,),
    "3.5.13": (540, 550, 560, 570, 580, 590, 591, 592, 593),
    "3.5.14": (610, 611, 640),
    "3.5.15": (800,),
    "3.5.16": (810, 820, 830, 840, 850, 860, 870, 880, 890),
    "3.5.17": (900, 910),
    "3.5.18": (920, 921, 922, 923),
    "3.5.19": (930, 940),
    "3.5.20": (980, 990),
}
G_SECTION: Final = {code: section for section, codes in _SECTIONS.items() for code in codes}

# Which codes take a word that is not an axis, F, S or T word. A word that nothing on its line takes is an
# error (3.3: whatever is not allowed is an error; the single messages for it are from memory).
TAKEN_BY: Final = {
    "p": frozenset((40, 100, 820, 860, 880, 890)),
    "r": ARCS | CYCLES,
    "l": frozenset((100,)) | CYCLES,
    "q": frozenset((830,)),
    "i": ARCS | {870},
    "j": ARCS | {870},
    "k": ARCS | {870},
    "h": frozenset((430,)),
    "d": frozenset((410, 420)),
}


def label(code: int) -> str:
    """Return the word for a G code held times ten: 591 is ``"G59.1"``."""
    return f"G{code // 10}" if code % 10 == 0 else f"G{code // 10}.{code % 10}"


class LanguageError(Exception):
    """One line breaks the language, or asks for what a proof cannot follow. Never leaves the reader.

    Attributes
    ----------
    word : str
        The word or characters at fault, as a person would write them.
    message : str
        What is wrong and what would be valid.
    section : str
        Section of NISTIR 6556.
    """

    def __init__(self, word: str, message: str, section: str) -> None:
        super().__init__(f"{word}: {message} [NISTIR 6556 section {section}]")
        self.word = word
        self.message = message
        self.section = section


def whole(word: str, value: float, low: int, high: int, section: str) -> int:
    """Return value as an integer from low to high.

    Parameters
    ----------
    word : str
        What to call it in the message.
    value : float
        A value within 0.0001 of an integer counts as that integer (3.3.2.1).
    low, high : int
        Smallest and largest allowed.
    section : str
        Section that rules the word.

    Raises
    ------
    LanguageError
        Value is not an integer, or out of range.
    """
    nearest = round(value)
    if abs(value - nearest) > INTEGER_SLACK:
        raise LanguageError(f"{word}{value:g}", f"{word} takes a whole number", section)
    if not low <= nearest <= high:
        raise LanguageError(f"{word}{nearest}", f"{word} takes {low} to {high}", section)
    return nearest
