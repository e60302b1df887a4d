"""Number text: one strict grammar, used by the database for plain figures and by Python for the rest."""

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

_SUPERSCRIPT = "[⁰¹²³⁴-⁹⁽⁾]"
_FOOTNOTE = rf"{_SUPERSCRIPT}+(?:[,\s]+{_SUPERSCRIPT}+)*"
_LEADING_FOOTNOTE = re.compile(rf"({_FOOTNOTE})\s*")
_TRAILING_FOOTNOTE = re.compile(rf"\s*({_FOOTNOTE})$")
_SPACES = "\u00a0\u202f\u2009"
_APOSTROPHES = "\u2019"
_MINUS = "\u2212"


@dataclass(frozen=True)
class NumberFormat:
    """How a source writes figures: marks, texts without a figure and letters glued to a figure."""

    decimal: str = "."
    thousands: str | None = None
    missing: Mapping[str, str] = field(default_factory=lambda: {"": "O"})
    flags: Mapping[str, str] = field(default_factory=dict)

    @cached_property
    def marks(self) -> dict[str, str]:
        """Text of a cell without a figure -> status; an empty cell always is one."""
        return {"": "O", **self.missing}

    @cached_property
    def thousands_mark(self) -> str:
        """The declared thousands mark, with every kind of space written as a plain one; "" for none."""
        mark = self.thousands or ""
        return {_APOSTROPHES: "'", **dict.fromkeys(_SPACES, " ")}.get(mark, mark)

    @cached_property
    def pattern(self) -> str:
        """The plain figure, in the grammar that Python and the database's RE2 share.

        A grouped figure has complete groups of three behind a first group that does not start with 0. An
        exponent is read only where its letter cannot be a declared flag.
        """
        point = re.escape(self.decimal)
        whole = "[0-9]+"
        if self.thousands_mark:
            group = re.escape(self.thousands_mark)
            whole = f"(?:[1-9][0-9]{{0,2}}(?:{group}[0-9]{{3}})+|[0-9]+)"
        exponent = "" if {"e", "E"} & set(self.flags) else "(?:[eE][+-]?[0-9]{1,3})?"
        return f"[+-]?(?:{whole}(?:{point}[0-9]+)?|{point}[0-9]+){exponent}"

    @cached_property
    def _plain(self) -> re.Pattern[str]:
        return re.compile(self.pattern)

    def to_float(self, text: str) -> float | None:
        """Return the figure a plain text stands for, None when the text is not one."""
        text = text.replace(_MINUS, "-")
        if self.thousands_mark == " ":
            text = text.translate(dict.fromkeys(map(ord, _SPACES), " "))
        elif self.thousands_mark == "'":
            text = text.replace(_APOSTROPHES, "'")
        if not self._plain.fullmatch(text):
            return None
        if self.thousands_mark:
            text = text.replace(self.thousands_mark, "")
        return float(text.replace(self.decimal, "."))


class Parsed(NamedTuple):
    """What one text says: a figure, no figure (NaN), or a fault; the status it carries ("" for none)."""

    value: float
    status: str = ""
    footnote: str = ""
    fault: str = ""


class ParsedTexts(NamedTuple):
    """`Parsed`, column by column: value f8 (NaN without a figure), position in the status list (-1 for
    none), and the faults by position."""

    value: NDArray[np.float64]
    status: NDArray[np.int8]
    faults: dict[int, str]


def split_footnote(text: str) -> tuple[str, str]:
    """Return (text, footnote): superscript digits at either end are footnote marks, never digits."""
    text = text.strip()
    notes = []
    if leading := _LEADING_FOOTNOTE.match(text):
        notes.append(leading[1])
        text = text[leading.end() :]
    if trailing := _TRAILING_FOOTNOTE.search(text):
        notes.append(trailing[1])
        text = text[: trailing.start()]
    return text, " ".join(notes)


def parse_number(text: str, form: NumberFormat) -> Parsed:
    """Read one cell text.

    Returns a figure with its flag's status, NaN with a status for a declared missing mark, or NaN with a
    fault. A text that could be read in two ways is a fault, not a guess.
    """
    if text.strip() in form.marks:
        return Parsed(math.nan, form.marks[text.strip()])
    core, footnote = split_footnote(text)
    if core == "":
        return Parsed(math.nan, fault="a footnote mark without a figure")
    if core in form.marks:
        return Parsed(math.nan, form.marks[core], footnote)
    value = form.to_float(core)
    status = ""
    if value is None:
        for flag in sorted(form.flags, key=len, reverse=True):
            rests = [core[: -len(flag)]] if core.endswith(flag) else []
            rests += [core[len(flag) :]] if core.startswith(flag) else []
            for rest in rests:
                bare, note = split_footnote(rest)
                if bare and bare in form.marks:
                    return Parsed(math.nan, form.marks[bare], " ".join(filter(None, (footnote, note))))
                value = form.to_float(bare)
                if value is not None:
                    status, footnote = form.flags[flag], " ".join(filter(None, (footnote, note)))
                    break
            if value is not None:
                break
    if value is None:
        return Parsed(math.nan, fault=_fault(core, form))
    if not math.isfinite(value):
        return Parsed(math.nan, fault="the figure is too large to hold")
    return Parsed(value, status, footnote)


def parse_texts(texts: Sequence[str], form: NumberFormat, statuses: Sequence[str]) -> ParsedTexts:
    """Read a column of texts, each distinct text once.

    Args:
        texts: N cell texts.
        statuses: the CL_OBS_STATUS list; positions in it are returned.
    """
    position = {code: at for at, code in enumerate(statuses)}
    known: dict[str, Parsed] = {}
    value = np.full(len(texts), np.nan)
    status = np.full(len(texts), -1, dtype=np.int8)
    faults: dict[int, str] = {}
    for at, text in enumerate(texts):
        parsed = known.get(text)
        if parsed is None:
            parsed = known[text] = parse_number(text, form)
        if parsed.fault:
            faults[at] = parsed.fault
            continue
        value[at] = parsed.value
        if parsed.status:
            status[at] = position[parsed.status]
    return ParsedTexts(value, status, faults)


def _fault(core: str, form: NumberFormat) -> str:
    if not re.search("[0-9]", core):
        return "text where a figure is expected, and not a declared missing mark"
    if core.endswith("%"):
        return "a percentage; its unit is not that of the column"
    if re.search(_SUPERSCRIPT, core):
        return "a superscript mark inside the figure"
    letters = re.sub(r"[0-9.,'+\-\s]", "", core)
    if letters and letters != _MINUS:
        return f"'{letters}' beside the figure is not a declared flag"
    other = "," if form.decimal == "." else "."
    if other in core and other != form.thousands_mark:
        return f"'{other}' in the figure, but '{form.decimal}' is the declared decimal mark"
    if form.thousands_mark and form.thousands_mark in core:
        return f"the thousands mark '{form.thousands_mark}' is misplaced"
    return "not a figure in the declared form"
