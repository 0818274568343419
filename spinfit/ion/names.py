"""What a user calls an ion: names, charges, configurations and term symbols, read into plain data.

Understood are ions ("Er3+", "Er(III)", "Er+3", "Er³⁺"), free atoms ("N"), configurations ("3d7", "4f11",
"2p3 3s1", "[Ar] 3d6 4s2") and term symbols alone ("4F9/2").
"""

from __future__ import annotations

import csv
import re
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

from spinfit.errors import InputError, nearest

ORBITAL_LETTERS = "spdfghi"
TERM_LETTERS = "SPDFGHIKLMNOQRTUVWXYZ"
_ROMAN = ("I", "II", "III", "IV", "V", "VI", "VII", "VIII")
_NOBLE = {
    "": (),
    "He": ("1s2",),
    "Ne": ("1s2", "2s2", "2p6"),
    "Ar": ("1s2", "2s2", "2p6", "3s2", "3p6"),
    "Kr": ("1s2", "2s2", "2p6", "3s2", "3p6", "3d10", "4s2", "4p6"),
    "Xe": ("1s2", "2s2", "2p6", "3s2", "3p6", "3d10", "4s2", "4p6", "4d10", "5s2", "5p6"),
    "Rn": ("1s2", "2s2", "2p6", "3s2", "3p6", "3d10", "4s2", "4p6", "4d10", "4f14", "5s2", "5p6", "5d10", "6s2", "6p6"),
}
_SUPERSCRIPTS = str.maketrans("⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻−", "0123456789+--")
HOW_TO_NAME = 'write an ion such as "Er3+" or "Er(III)", a configuration such as "3d7", or a term such as "4F9/2"'


@dataclass(frozen=True)
class Shell:
    """`count` equivalent electrons nl; `n` is 0 when it was not given ("d7")."""

    n: int
    l: int  # noqa: E741  the letter of the trade
    count: int

    @property
    def capacity(self) -> int:
        """How many electrons the shell holds."""
        return 4 * self.l + 2

    @property
    def open(self) -> bool:
        """Whether it is neither empty nor full."""
        return 0 < self.count < self.capacity

    def __str__(self) -> str:
        return f"{self.n or ''}{ORBITAL_LETTERS[self.l]}{self.count}"


@dataclass(frozen=True)
class Named:
    """What a name stands for.

    Attributes
    ----------
    name : str
        Canonical: "Er3+", "3d7", "4F9/2".
    shells : tuple of Shell
        The valence configuration; empty for a term symbol alone.
    element : str or None
    charge : int or None
    term : (S, L, J) or None
        For a term symbol alone, and for atoms whose ground level is not that of Hund's rules.
    """

    name: str
    shells: tuple[Shell, ...] = ()
    element: str | None = None
    charge: int | None = None
    term: tuple[float, int, float] | None = None

    @property
    def open_shells(self) -> tuple[Shell, ...]:
        """Those that carry spin or orbital moment."""
        return tuple(shell for shell in self.shells if shell.open)

    @property
    def configuration(self) -> str | None:
        """Text such as "4f11"; None for a term symbol alone."""
        return " ".join(str(shell) for shell in self.shells) if self.shells else None


def half(value: float) -> str:
    """Write a multiple of one half as the trade does: 7.5 is "15/2", 3.0 is "3"."""
    twice = round(2 * value)
    return f"{twice}/2" if twice % 2 else str(twice // 2)


def term_symbol(S: float, L: int, J: float | None = None) -> str:
    """Write a term or level: (1.5, 6, 7.5) is "4I15/2"."""
    letter = TERM_LETTERS[L] if L < len(TERM_LETTERS) else f"[{L}]"
    return f"{round(2 * S) + 1}{letter}" + ("" if J is None else half(J))


@lru_cache(maxsize=1)
def _elements() -> dict[tuple[str, int], tuple[int, str, str, str]]:
    """Return (symbol, charge) -> (Z, noble-gas core, configuration outside it, level where Hund's rules fail)."""
    text = (Path(__file__).parents[1] / "data" / "elements.csv").read_text(encoding="utf-8")
    rows = csv.DictReader(line for line in text.splitlines() if not line.startswith("#"))
    return {(r["symbol"], int(r["charge"])): (int(r["z"]), r["core"], r["configuration"], r["level"]) for r in rows}


def _read_shells(words: list[str], text: str) -> tuple[Shell, ...]:
    """Read "3d6", "4s2" and check that nature allows them."""
    shells: list[Shell] = []
    for word in words:
        match = re.fullmatch(r"(\d?)([spdfghi])(\d{1,2})", word)
        if match is None:
            raise InputError(f'"{word}" in "{text}" is not a shell with its electrons', 'write "3d7" or "2p3 3s1"')
        n, orbital, count = int(match[1] or 0), ORBITAL_LETTERS.index(match[2]), int(match[3])
        shell = Shell(n, orbital, count)
        if n and orbital >= n:
            raise InputError(
                f'there is no {n}{match[2]} shell in "{text}"', f"{match[2]} shells begin at n = {orbital + 1}"
            )
        if count > shell.capacity:
            raise InputError(
                f'"{word}" has {count} electrons', f"{_article(match[2])} {match[2]} shell holds 0 to {shell.capacity}"
            )
        if any((s.n, s.l) == (n, orbital) for s in shells):
            raise InputError(f'"{text}" names the {n or ""}{match[2]} shell twice', "name each shell once")
        shells.append(shell)
    return tuple(shells)


def _article(letter: str) -> str:
    return "an" if letter in "fshi" else "a"


def _remove_one(shells: list[Shell]) -> None:
    """Take one electron from the outermost shell: highest n, then highest l."""
    k = max(range(len(shells)), key=lambda i: (shells[i].n, shells[i].l))
    shell = shells[k]
    if shell.count == 1:
        del shells[k]
    else:
        shells[k] = Shell(shell.n, shell.l, shell.count - 1)


def _tidy(shells: list[Shell]) -> tuple[Shell, ...]:
    """Leave out filled d and f shells that lie under an open one of the same or a higher period."""
    ordered = sorted(shells, key=lambda s: (s.n, s.l))
    kept = []
    for shell in ordered:
        buried_f = shell.l == 3 and any(s.l < 3 and s.n > shell.n for s in ordered)
        buried_d = shell.l == 2 and any(s.l == 1 and s.n > shell.n for s in ordered)
        if shell.open or not (buried_f or buried_d):
            kept.append(shell)
    return tuple(kept)


def _ion_shells(element: str, charge: int, name: str) -> tuple[Shell, ...]:
    """Return the valence shells of an element at a charge."""
    z, core, outer, _ = _elements()[element, 0]
    if charge >= z:
        raise InputError(
            f'"{name}" has {"no electrons left" if charge == z else "more charge than electrons"}',
            f"{element} has {z} electron{'s' if z > 1 else ''}: write a charge below {z}",
        )
    known = _elements().get((element, charge))
    if known is not None:
        return _tidy(list(_read_shells(known[2].split(), name)))
    shells = list(_read_shells(outer.split(), name))
    if charge < 0:
        return _tidy(_with_added(shells, -charge, element, name))
    in_core = charge - sum(s.count for s in shells)
    if in_core < 0:
        for _ in range(charge):
            _remove_one(shells)
        return _tidy(shells)
    inner = list(_read_shells(list(_NOBLE[core]), name))
    for _ in range(in_core):
        _remove_one(inner)
    last = max(s.n for s in inner)
    return tuple(s for s in inner if s.n == last or s.open)


def _with_added(shells: list[Shell], count: int, element: str, name: str) -> list[Shell]:
    """Put electrons into the outermost open shell, or the p shell that s2 calls for."""
    for _ in range(count):
        k = max((i for i, s in enumerate(shells) if s.open), key=lambda i: (shells[i].n, shells[i].l), default=None)
        if k is None:
            raise InputError(
                f'"{name}": {element} does not hold {count} more electron{"s" if count > 1 else ""} in its open shell',
                "write a charge that exists, or the configuration itself",
            )
        shells[k] = Shell(shells[k].n, shells[k].l, shells[k].count + 1)
    return shells


def _split_ion(text: str) -> tuple[str, int] | None:
    """Return (symbol, charge) of "Er3+", "Er+3", "Er(III)", "Er(3+)", "Cu++", "N"; None for anything else."""
    match = re.fullmatch(
        r"([A-Za-z]{1,3}?)\s*\^?\s*(?:\((.+?)\)|(\d{0,3})([+-])|([+-])(\d{1,3})|([+-]{2,})|(0)|)", text
    )
    if match is None:
        return None
    symbol, inside, digits, sign, sign2, digits2, signs, _zero = match.groups()
    if inside is not None:
        inside = inside.strip()
        if inside.upper() in _ROMAN:
            return symbol, _ROMAN.index(inside.upper()) + 1
        if inside.upper().startswith("-") and inside[1:].upper() in _ROMAN:
            return symbol, -_ROMAN.index(inside[1:].upper()) - 1
        if inside == "0":
            return symbol, 0
        number = re.fullmatch(r"(\d+)([+-])|([+-])(\d+)", inside)
        if number is None:
            raise InputError(f'"{text}" has no charge that can be read', f"write {symbol}(III) or {symbol}3+")
        value = int(number[1] or number[4])
        return symbol, value if "+" in (number[2], number[3]) else -value
    if signs:
        if len(set(signs)) > 1:
            return None
        return symbol, len(signs) if signs[0] == "+" else -len(signs)
    if sign or sign2:
        value = int(digits or digits2 or 1)
        return symbol, value if (sign or sign2) == "+" else -value
    return symbol, 0


def _canonical_ion(element: str, charge: int) -> str:
    if charge == 0:
        return element
    size = "" if abs(charge) == 1 else str(abs(charge))
    return f"{element}{size}{'+' if charge > 0 else '-'}"


def _parse_term(text: str) -> Named | None:
    """Read "4F9/2"; refuse a J outside |L-S|..L+S."""
    match = re.fullmatch(r"(\d{1,2})([A-Z])(?:(\d{1,2})(/2)?)?", text)
    if match is None or match[2] not in TERM_LETTERS:
        return None
    S, L = (int(match[1]) - 1) / 2, TERM_LETTERS.index(match[2])
    if int(match[1]) == 0:
        raise InputError(f'"{text}" has multiplicity 0', "the number in front is 2S+1, at least 1")
    allowed = [abs(L - S) + k for k in range(int(L + S - abs(L - S)) + 1)]
    levels = ", ".join(half(J) for J in allowed)
    if match[3] is None:
        if len(allowed) > 1:
            raise InputError(f'"{text}" has no J', f"write one of its levels: J = {levels}")
        J = allowed[0]
    else:
        J = int(match[3]) / (2 if match[4] else 1)
    if J not in allowed:
        raise InputError(f'"{text}": J = {half(J)} does not occur in {term_symbol(S, L)}', f"J is one of {levels}")
    return Named(term_symbol(S, L, J), term=(S, L, J))


def parse_name(text: str) -> Named:
    """Read the name of an ion, an atom, a configuration or a level.

    Parameters
    ----------
    text : str
        Such as "Er3+", "Er(III)", "Er+3", "N", "3d7", "2p3 3s1", "4F9/2".

    Returns
    -------
    Named

    Raises
    ------
    InputError
        Unknown element (nearest suggested), impossible charge, more electrons than a shell holds, a J
        that the term does not have.
    """
    plain = text.translate(_SUPERSCRIPTS).strip() if isinstance(text, str) else ""
    if not plain or len(plain) > 60:
        raise InputError(f"{text!r:.50} is not the name of an ion", HOW_TO_NAME)
    body = re.sub(r"^\[(He|Ne|Ar|Kr|Xe|Rn)\]\s*", "", plain)
    words = body.split()
    if words and all(re.fullmatch(r"\d{0,2}[spdfghi]\d{1,3}", word) for word in words):
        shells = _read_shells(words, plain)
        kept = tuple(s for s in shells if s.count) or shells
        return Named(" ".join(str(s) for s in kept), shells=kept)
    term = _parse_term(plain)
    if term is not None:
        return term
    split = _split_ion(plain)
    if split is None:
        raise InputError(f'"{plain}" is not the name of an ion', HOW_TO_NAME)
    symbol, charge = split
    known = {key[0] for key in _elements()}
    element = symbol if symbol in known else symbol.capitalize() if symbol.islower() else symbol
    if element not in known:
        raise InputError(f'there is no element "{symbol}" in "{plain}"', f"{nearest(symbol, known)} {HOW_TO_NAME}")
    name = _canonical_ion(element, charge)
    shells = _ion_shells(element, charge, name)
    exception = _elements().get((element, charge), ("",))[-1]
    level = _parse_term(exception) if exception else None
    return Named(name, shells, element, charge, None if level is None else level.term)
