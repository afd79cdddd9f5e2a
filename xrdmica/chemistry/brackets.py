"""Formula text as written by mineralogists -> a tree of atoms and brackets; nothing here knows about sites."""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass, replace

from xrdmica.chemistry.ions import DEFAULT_CHARGE, GROUP_IONS, ion_name
from xrdmica.errors import ChemistryError

__all__ = ["VACANCY", "Atom", "Bracket", "normalised", "read_tree"]

VACANCY = "□"
_LONGEST = 1000
_DEEPEST = 12
_MOST = 1000.0
_SUPER = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻", "0123456789+-")
_CLOSING = {"(": ")", "[": "]", "{": "}"}
_ROMAN = {"I": 1, "II": 2, "III": 3, "IV": 4, "V": 5, "VI": 6}
_NUMBER = re.compile(r"[0-9]+(?:\.[0-9]+)?|\.[0-9]+")
_SYMBOL = re.compile(r"C2H6O2|C3H8O3|NH4|H3O|H2O(?![0-9])|OH(?![a-z])|HO(?![a-z])|□|[Vv]ac(?:ancy|ant)?(?![a-z])|VAC|[A-Z][a-z]?")
_RAISED = re.compile(r"\^\s*(?:([0-9]?)([+-])|([+-])([0-9])|(VI|IV|V|I{1,3}))\s*\^?")
_PLAIN_CHARGE = re.compile(r"([0-9]?)([+-])")
_SIGN_FIRST = re.compile(r"([+-])([0-9])(?![0-9.])")
_ROMAN_CHARGE = re.compile(r"\(\s*(VI|IV|V|I{1,3})\s*\)|(I{2,3})(?![a-z])")
_SUM = re.compile(r"[Σ∑]\s*=?\s*")
_BEFORE_WATER = re.compile(r"\s*\(?\s*H2O")
_WATER_NUMBER = r"[0-9]*(?:\.[0-9]+)?\s*[(\[]?H2O"


@dataclass(frozen=True)
class Atom:
    """An atom or group such as OH; `charge` and `amount` are None where the text gives none."""

    symbol: str
    charge: int | None = None
    amount: float | None = None


@dataclass(frozen=True)
class Bracket:
    """A bracket; `listed` says that commas stand in it, `is_sum` that the number behind it is marked as its sum."""

    items: tuple[Atom | Bracket, ...]
    factor: float | None = None
    listed: bool = False
    is_sum: bool = False
    source: str = ""


def normalised(text: str) -> str:
    """The formula in plain characters: raised charges as ``^3+^``, hydrate dots as ``*``, decimal points.

    Raises
    ------
    ChemistryError
        If the text is empty, too long, or mixes decimal points with decimal commas.
    """
    if len(text) > _LONGEST:
        raise ChemistryError(f"the formula is {len(text)} characters long", fix=f"give one formula of at most {_LONGEST}")
    text = re.sub(r"</?sub>", "", re.sub(r"</?sup>", "^", text, flags=re.IGNORECASE), flags=re.IGNORECASE)
    text = re.sub(r"\^\{([^{}]*)\}", r"^\1^", re.sub(r"_\{([^{}]*)\}", r"\1", text))
    text = re.sub("[⁰¹²³⁴-⁹]*[⁺⁻]", lambda m: f"^{m.group().translate(_SUPER)}^", text)
    text = re.sub("[□▯◻☐◽⬜]|\\[\\s*\\]", VACANCY, unicodedata.normalize("NFKC", text))
    text = re.sub("[·•⋅∙×∗・]", "*", re.sub("[‐-―−]", "-", text)).replace("_", "").strip()
    # one full stop at the end of a sentence is no part of the formula
    text = re.sub(r"(?<=[0-9A-Za-z)\]}])\.$", "", text)
    # O10(OH)2.4H2O: the point is a hydrate dot when a whole number of anions stands before it
    text = re.sub(r"(?<=[)\]}FH])([1-9][0-9]*)[.,](?=[0-9]+(?:\.[0-9]+)?\s*[(\[]?H2O)", r"\1*", text)
    text = re.sub(rf"(?<=[0-9)\]}}])\s*\.\s*(?=[(\[]?H2O)|\s\.\s*(?={_WATER_NUMBER})", "*", text)
    if re.search("[0-9],[0-9]", text):
        if re.search(r"[0-9]\.[0-9]", text):
            raise ChemistryError(
                "the formula has both decimal points and commas between digits", fix="use the point for decimals, everywhere"
            )
        text = re.sub("(?<=[0-9]),(?=[0-9])", ".", text)
    if not text:
        raise ChemistryError("the formula is empty", fix="write something like KAl2(AlSi3)O10(OH)2")
    return text


class _Reader:
    """Recursive descent over one formula text."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0

    def fail(self, what: str, fix: str) -> ChemistryError:
        return ChemistryError(f"{what} at character {self.at + 1} of {self.text!r}", fix=fix)

    def take(self, pattern: re.Pattern[str]) -> re.Match[str] | None:
        match = pattern.match(self.text, self.at)
        if match is not None:
            self.at = match.end()
        return match

    def skip(self, characters: str) -> str:
        start = self.at
        while self.at < len(self.text) and (self.text[self.at] in characters or self.text[self.at].isspace()):
            self.at += 1
        return self.text[start : self.at]

    def amount(self) -> float | None:
        """A number behind an atom or bracket, unless it counts the water that follows."""
        start = self.at
        self.skip("")
        match = _NUMBER.match(self.text, self.at)
        if match is None or (self.at > start and _BEFORE_WATER.match(self.text, match.end())):
            self.at = start
            return None
        value = float(match.group())
        if value > _MOST:
            raise self.fail(f"the amount {match.group()} is impossible", "check the number")
        self.at = match.end()
        return value

    def raised_charge(self) -> int | None:
        match = self.take(_RAISED)
        if match is None:
            return None
        if match.group(5):
            return _ROMAN[match.group(5)]
        size = int(match.group(1) or match.group(4) or 1)
        return size if "+" in (match.group(2), match.group(3)) else -size

    def charge(self, symbol: str) -> int | None:
        raised = self.raised_charge()
        if raised is not None:
            return raised
        roman = self.take(_ROMAN_CHARGE)
        if roman is not None:
            return _ROMAN[roman.group(1) or roman.group(2)]
        plain = _PLAIN_CHARGE.match(self.text, self.at)
        if plain is None:
            return None
        first = _SIGN_FIRST.match(self.text, self.at)
        # K+2 is two K+, but Fe+3 can only be Fe3+
        if first is not None and abs(DEFAULT_CHARGE.get(symbol, 1)) != 1:
            self.at = first.end()
            return int(first.group(2)) * (1 if first.group(1) == "+" else -1)
        self.at = plain.end()
        return int(plain.group(1) or 1) * (1 if plain.group(2) == "+" else -1)

    def atom(self) -> Atom:
        start = self.at
        match = self.take(_SYMBOL)
        if match is None:
            shown = self.text[self.at]
            if re.match(r"[nxyz]", shown):
                raise self.fail(f"the letter {shown!r} stands for an unknown amount", "write a number (water may be left out)")
            raise self.fail(f"{shown!r} is not understood", "write elements, numbers and brackets, as in KAl2(AlSi3)O10(OH)2")
        symbol = match.group()
        if symbol == VACANCY or symbol.lower().startswith("vac"):
            symbol = VACANCY
        elif symbol == "HO":
            symbol = "OH"
        elif symbol not in DEFAULT_CHARGE and not any(ion.rstrip("+-") == symbol for ion in GROUP_IONS):
            if symbol[:1] in DEFAULT_CHARGE and symbol[1:] not in tuple("nxyz"):
                self.at = start
                raise self.fail(f"{symbol!r} is no element of a sheet silicate", "check capitals and spelling")
            if symbol[:1] not in DEFAULT_CHARGE:
                self.at = start
                raise self.fail(f"{symbol!r} is no element of a sheet silicate", "check the formula's spelling")
            symbol = symbol[:1]
            self.at = start + 1
        if symbol == VACANCY:
            return Atom(symbol, None, self.amount())
        charge = self.charge(symbol)
        amount = self.amount()
        if charge is None:
            charge = self.raised_charge()
        if charge is not None:
            try:
                ion_name(symbol, charge)
            except ChemistryError as error:
                self.at = start
                raise self.fail(error.what, f"{error.fix}; brackets say which site it is on") from error
        return Atom(symbol, charge, amount)

    def bracket(self, depth: int) -> Bracket:
        start, opening = self.at, self.text[self.at]
        if depth > _DEEPEST:
            raise self.fail("brackets are nested too deeply", f"use at most {_DEEPEST} levels")
        self.at += 1
        items, listed = self.sequence(_CLOSING[opening], depth + 1)
        if self.at >= len(self.text):
            self.at = start
            raise self.fail(f"the bracket {opening} is not closed", f"add {_CLOSING[opening]}")
        self.at += 1
        if not items:
            self.at = start
            raise self.fail("there is nothing between the brackets", "write the ions, or [] or vac for a vacancy")
        charge = self.raised_charge()
        if charge is None and (plain := self.take(_PLAIN_CHARGE)):
            charge = int(plain.group(1) or 1) * (1 if plain.group(2) == "+" else -1)
        if charge is not None:
            only = items[0]
            if len(items) > 1 or not isinstance(only, Atom) or only.charge not in (None, charge):
                raise self.fail("a charge behind a bracket of several ions is not read", "write charges behind the ions")
            try:
                ion_name(only.symbol, charge)
            except ChemistryError as error:
                self.at = start
                raise self.fail(error.what, error.fix) from error
            items = (replace(only, charge=charge),)
        is_sum = self.take(_SUM) is not None
        factor = self.amount()
        if is_sum and factor is None:
            raise self.fail("the number behind the sum sign is missing", "write it, such as Σ3.00, or leave the sign out")
        return Bracket(items, factor, listed, is_sum, self.text[start : self.at])

    def sequence(self, closing: str, depth: int) -> tuple[tuple[Atom | Bracket, ...], bool]:
        """Everything up to a closing bracket or the end; a number after ``*`` multiplies what follows it."""
        items: list[Atom | Bracket] = []
        listed, multiplied_from, multiplier = False, 0, 1.0
        while True:
            between = self.skip(",/*|")
            listed = listed or "," in between or "/" in between
            if "*" in between:
                items[multiplied_from:] = _multiplied(items[multiplied_from:], multiplier)
                multiplied_from, multiplier = len(items), 1.0
            if self.at >= len(self.text) or self.text[self.at] == closing:
                break
            character = self.text[self.at]
            if character in _CLOSING.values():
                raise self.fail(f"{character!r} closes no bracket", "check that brackets come in pairs")
            number = _NUMBER.match(self.text, self.at)
            if number is not None:
                if "*" not in between and not _BEFORE_WATER.match(self.text, number.end()):
                    raise self.fail(f"the number {number.group()} stands before an ion", "write Mg3, not 3Mg")
                value = self.amount_before()
                if "*" in between:
                    multiplier = value
                    continue
                self.skip("")
                water = self.bracket(depth) if self.text[self.at] == "(" else self.atom()
                items += _multiplied([water], value)
                continue
            items.append(self.bracket(depth) if character in _CLOSING else self.atom())
        items[multiplied_from:] = _multiplied(items[multiplied_from:], multiplier)
        return tuple(items), listed

    def amount_before(self) -> float:
        match = self.take(_NUMBER)
        value = float(match.group()) if match else 1.0
        if value > _MOST:
            raise self.fail(f"the amount {value:g} is impossible", "check the number")
        return value


def _multiplied(items: list[Atom | Bracket], factor: float) -> list[Atom | Bracket]:
    if factor == 1.0:
        return items
    return [
        replace(i, amount=(1.0 if i.amount is None else i.amount) * factor)
        if isinstance(i, Atom)
        else Bracket((i,), factor, source=i.source)
        for i in items
    ]


def read_tree(text: str) -> Bracket:
    """Read normalised formula text into a tree whose root is the formula as a whole.

    Raises
    ------
    ChemistryError
        If the text is no formula; the message names the character.
    """
    items, _ = _Reader(text).sequence("", 0)
    if not items:
        raise ChemistryError(f"there is no ion in {text!r}", fix="write something like KAl2(AlSi3)O10(OH)2")
    return Bracket(items, source=text)
