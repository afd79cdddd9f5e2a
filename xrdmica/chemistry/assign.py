"""From a tree of atoms and brackets to ions on sites."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field, replace

from xrdmica.chemistry.brackets import VACANCY, Atom, Bracket
from xrdmica.chemistry.ions import ANION_SYMBOLS, INTERLAYER_ONLY, ion_name, may_sit
from xrdmica.errors import ChemistryError

__all__ = ["Block", "Draft", "Part", "blocks_of", "drafts"]

_MOLECULES = ("C2H6O2", "C3H8O3")
_ONLY_TETRAHEDRAL = ("B", "Be", "Ge")


@dataclass(frozen=True)
class Part:
    """So many atoms of one element; `charge` is None when the text gives none."""

    symbol: str
    charge: int | None
    amount: float

    @property
    def ion(self) -> str:
        """The ion, with the usual charge when the text gives none; sulfur is an anion here."""
        return ion_name(self.symbol, -2 if self.symbol == "S" else self.charge)

    @property
    def large(self) -> bool:
        """Whether it can only be between the layers."""
        return self.symbol in INTERLAYER_ONLY or self.symbol in _MOLECULES


@dataclass(frozen=True)
class Block:
    """Cations written together: one naked atom, or the content of a bracket."""

    parts: tuple[Part, ...]
    bracketed: bool

    @property
    def total(self) -> float:
        """Atoms in the block."""
        return sum(p.amount for p in self.parts)

    @property
    def tetrahedral(self) -> bool:
        """Whether silicon is in it and everything else could be beside silicon."""
        return self.has("Si") and all(may_sit(p.ion, "tetrahedral") or p.symbol == "Fe" for p in self.parts)

    def has(self, symbol: str) -> bool:
        """Whether an element is in the block."""
        return any(p.symbol == symbol for p in self.parts)


@dataclass
class Draft:
    """One way to put the ions on sites; `bare_iron` counts iron without a charge per site."""

    interlayer: dict[str, float] = field(default_factory=dict)
    octahedral: dict[str, float] = field(default_factory=dict)
    tetrahedral: dict[str, float] = field(default_factory=dict)
    bare_iron: dict[str, float] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def add(self, site: str, part: Part) -> None:
        """Put a part on a site."""
        content: dict[str, float] = getattr(self, site)
        content[part.ion] = content.get(part.ion, 0.0) + part.amount
        if part.symbol == "Fe" and part.charge is None:
            self.bare_iron[site] = self.bare_iron.get(site, 0.0) + part.amount


def _leaves(item: Atom | Bracket) -> Iterator[Atom]:
    if isinstance(item, Atom):
        yield item
    else:
        for inner in item.items:
            yield from _leaves(inner)


def _is_anion(item: Atom | Bracket) -> bool:
    return all(leaf.symbol in ANION_SYMBOLS or leaf.symbol == VACANCY for leaf in _leaves(item))


def _inner_total(bracket: Bracket) -> float:
    total = 0.0
    for item in bracket.items:
        if isinstance(item, Atom):
            total += 1.0 if item.amount is None else item.amount
        else:
            total += _inner_total(item) * (1.0 if item.factor is None else item.factor)
    return total


def _listed_without_amounts(bracket: Bracket) -> bool:
    lacking = [i for i in bracket.items if isinstance(i, Atom) and i.amount is None]
    return bracket.listed and len(bracket.items) > 1 and (len(lacking) == len(bracket.items) or bool(lacking and bracket.factor))


def _opened(bracket: Bracket, notes: list[str]) -> tuple[tuple[Atom | Bracket, ...], float]:
    """Content of a bracket and the factor to multiply it with."""
    factor = 1.0 if bracket.factor is None else bracket.factor
    anions = _is_anion(bracket)
    if _listed_without_amounts(bracket):
        first = bracket.items[0]
        if not anions or not isinstance(first, Atom) or any(isinstance(i, Atom) and i.amount is not None for i in bracket.items):
            raise ChemistryError(
                f"{bracket.source} does not say how much of each ion there is", fix="write amounts, such as (Mg2.5Fe0.5)"
            )
        notes.append(f"{bracket.source} gives no amounts: counted as {first.symbol} only")
        return (first,), factor
    if bracket.factor is None:
        return bracket.items, 1.0
    total = _inner_total(bracket)
    if bracket.is_sum:
        if abs(total - factor) > 0.055:
            raise ChemistryError(f"the amounts in {bracket.source} sum to {total:.2f}", fix="correct the amounts or the sum")
        return bracket.items, 1.0
    broken = any(isinstance(i, Atom) and i.amount is not None and i.amount % 1 for i in bracket.items)
    # (Si3.2Al0.8)4: amounts that already sum to the number behind; with a 2 behind cations both readings occur
    if broken and len(bracket.items) > 1 and abs(total - factor) < 0.02 and factor > 1.05 and (anions or abs(factor - 2) > 0.05):
        notes.append(f"the number behind {bracket.source} is the sum of the amounts in it")
        return bracket.items, 1.0
    return bracket.items, factor


def blocks_of(tree: Bracket, notes: list[str]) -> list[Block]:
    """Blocks in the order of the text; anions are blocks of their own, vacancies are left out.

    Raises
    ------
    ChemistryError
        If amounts are missing.
    """
    blocks: list[Block] = []
    _collect(tree.items, 1.0, blocks, notes)
    return [b for b in (Block(tuple(p for p in b.parts if p.amount > 0), b.bracketed) for b in blocks) if b.parts]


def _part(atom: Atom, factor: float) -> Part:
    return Part(atom.symbol, atom.charge, (1.0 if atom.amount is None else atom.amount) * factor)


def _flat(items: Sequence[Atom | Bracket], factor: float, notes: list[str]) -> list[Part]:
    parts: list[Part] = []
    for item in items:
        if isinstance(item, Bracket):
            inner, more = _opened(item, notes)
            parts += _flat(inner, factor * more, notes)
        elif item.symbol != VACANCY:
            parts.append(_part(item, factor))
    return parts


def _collect(items: Sequence[Atom | Bracket], factor: float, blocks: list[Block], notes: list[str]) -> None:
    for item in items:
        if isinstance(item, Atom):
            if item.symbol != VACANCY:
                blocks.append(Block((_part(item, factor),), False))
            continue
        inner, more = _opened(item, notes)
        more *= factor
        if all(leaf.symbol == "H2O" or leaf.symbol in ANION_SYMBOLS or leaf.symbol == VACANCY for leaf in _leaves(item)):
            blocks += [Block((part,), False) for part in _flat(inner, more, notes)]
        elif any(leaf.symbol in ANION_SYMBOLS for leaf in _leaves(item)):
            _collect_mixed(inner, more, blocks, notes)
        elif any(leaf.symbol == "Si" for leaf in _leaves(item)) and any(
            isinstance(i, Bracket) and (len(i.items) > 1 or not isinstance(i.items[0], Atom)) for i in inner
        ):
            _collect(inner, more, blocks, notes)
        else:
            blocks.append(Block(tuple(_flat(inner, more, notes)), True))


def _collect_mixed(items: Sequence[Atom | Bracket], factor: float, blocks: list[Block], notes: list[str]) -> None:
    """A bracket that holds cations and anions, such as [AlSi3O10] or a whole layer."""
    direct = [i for i in items if isinstance(i, Atom) and i.symbol not in ANION_SYMBOLS and i.symbol not in (VACANCY, "H2O")]
    parts = tuple(_part(i, factor) for i in direct)
    together = any(p.symbol == "Si" for p in parts) and all(may_sit(p.ion, "tetrahedral") for p in parts)
    if together:
        blocks.append(Block(parts, True))
    _collect([i for i in items if not (together and i in direct)], factor, blocks, notes)


def _silicon(block: Block) -> float:
    return sum(p.amount for p in block.parts if p.symbol == "Si")


def _scaled(block: Block, scale: float) -> Block:
    return Block(tuple(replace(p, amount=p.amount * scale) for p in block.parts), block.bracketed)


def _loosened(blocks: list[Block], target: float) -> list[Block]:
    """Brackets that cannot be the tetrahedral site alone although silicon is in them become naked atoms."""
    pure = [b.bracketed and b.tetrahedral for b in blocks]
    result: list[Block] = []
    for block, is_pure in zip(blocks, pure, strict=True):
        fits = is_pure and block.total <= target + 0.5 and (len(block.parts) > 1 or block.total >= target - 0.05)
        if not block.bracketed or not block.has("Si") or fits or (not is_pure and any(pure)):
            result.append(block)
        else:
            result += [Block((part,), False) for part in block.parts]
    return result


def _prefixes(smalls: list[Block], explicit_t: bool) -> list[int]:
    """How many of the small-cation blocks before the tetrahedral site to try as interlayer cations, best guess first."""
    guesses: list[int] = []
    first_bracket = next((i for i, b in enumerate(smalls) if b.bracketed), 0)
    brackets = sum(b.bracketed for b in smalls)
    if first_bracket:
        guesses.append(first_bracket)
    elif brackets > 1:
        guesses.append(1)
    naked = [(b.parts[0].symbol, b.parts[0].charge) for b in smalls if not b.bracketed]
    repeat = next((i for i, ion in enumerate(naked) if ion in naked[:i] and (ion[0] != "Al")), 0)
    if repeat and not brackets:
        guesses.append(repeat)
    guesses.append(0)
    if explicit_t and not brackets and len(smalls) > 1 and smalls[0].has("Al"):
        guesses.append(1)
    return [k for k in guesses if sum(b.total for b in smalls[:k]) <= 1.05]


def drafts(blocks: Sequence[Block], scale: float, target: float) -> list[Draft]:
    """Ways to put cation blocks on sites, most likely first.

    Parameters
    ----------
    blocks : sequence of Block
        All blocks of the formula in the order of the text, anions included.
    scale : float
        Factor from the formula as written to one formula unit.
    target : float
        Tetrahedral cations expected per formula unit.

    Returns
    -------
    list of Draft
        At least one.

    Raises
    ------
    ChemistryError
        If no silicon is in the formula.
    """
    first_anion = next((i for i, b in enumerate(blocks) if b.parts[0].symbol in ANION_SYMBOLS), len(blocks))
    before = _loosened([_scaled(b, scale) for b in blocks[:first_anion]], target)
    after = _loosened([_scaled(b, scale) for b in blocks[first_anion:] if b.parts[0].symbol not in ANION_SYMBOLS], target)
    if not any(b.has("Si") for b in (*before, *after)):
        raise ChemistryError("there is no silicon in the formula", fix="write the formula of a sheet silicate")
    silicic = [b for b in (*before, *after) if b.bracketed and b.tetrahedral]
    crowded = sum(b.total for b in silicic) > target + 0.5
    richest = max((_silicon(b) for b in silicic), default=0.0)
    base = Draft()
    smalls: list[Block] = []
    late: list[Block] = []
    seen_t = False
    explicit_t = False
    for position, block in enumerate((*before, *after)):
        kept = [p for p in block.parts if not p.large]
        in_layer = sum(p.amount for p in kept) > 1.05 and any(p.large for p in block.parts)
        if block.bracketed and block.has("Si"):
            # of several brackets with silicon that are too much together, the one richest in silicon is tetrahedral
            pure = block.tetrahedral and (not crowded or _silicon(block) == richest)
            seen_t, explicit_t = seen_t or pure, explicit_t or pure
            for part in block.parts:
                base.add("tetrahedral" if pure else "octahedral", part)
        elif block.has("Si"):
            seen_t = True
            base.add("tetrahedral", block.parts[0])
        elif in_layer:
            for part in block.parts:
                base.add("octahedral", part)
        elif any(p.large for p in block.parts):
            for part in block.parts:
                base.add("interlayer", part)
        elif all(p.symbol == "H" for p in block.parts):
            base.add("interlayer", block.parts[0])
        else:
            (late if seen_t or position >= len(before) else smalls).append(block)
    return [_finish(base, smalls, late, k, target, explicit_t) for k in _prefixes(smalls, explicit_t)]


def _finish(base: Draft, smalls: list[Block], late: list[Block], k: int, target: float, explicit_t: bool) -> Draft:
    draft = Draft(dict(base.interlayer), dict(base.octahedral), dict(base.tetrahedral), dict(base.bare_iron))
    for block in smalls[:k]:
        for part in block.parts:
            draft.add("interlayer", part)
    if k:
        names = ", ".join(p.symbol for b in smalls[:k] for p in b.parts)
        draft.notes = (f"{names} before the octahedral cations was read as interlayer cation",)
    rest = [(part, block.bracketed) for block in (*smalls[k:], *late) for part in block.parts]
    missing = 0.0 if explicit_t else target - sum(draft.tetrahedral.values())
    # the rarer tetrahedral ions have no place elsewhere, so they come before aluminium; other ions only by brackets
    for symbol in (*_ONLY_TETRAHEDRAL, "Al"):
        for i, (part, bracketed) in enumerate(rest):
            if part.symbol == symbol and not bracketed and missing > 1e-9:
                taken = min(part.amount, missing)
                draft.add("tetrahedral", replace(part, amount=taken))
                missing -= taken
                rest[i] = (replace(part, amount=round(part.amount - taken, 9)), False)
    for part, _ in rest:
        if part.amount > 1e-9:
            draft.add("octahedral", part)
    return draft
