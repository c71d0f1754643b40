"""Block-sparse building blocks of matrix-product states that conserve every particle number.

In:  a local space with one charge per local state; bonds as charge -> dimension.
Out: fused legs, site tensors, and operators grown site by site from either end.
A site tensor never stores its zero blocks: charges (tuples, one entry per species) add along the chain, so
the tensor of a site is one matrix per outgoing charge q, whose rows are the pairs (local state s, incoming
charge q - charge of s). Operators change the charge by a fixed shift and travel together in batches.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from itertools import product

import numpy as np
from numpy.typing import NDArray

from gutz.exact.lattice import Floats

Charge = tuple[int, ...]
Bond = dict[Charge, int]
Fusion = dict[Charge, dict[tuple[int, Charge], slice]]


def add(x: Charge, y: Charge) -> Charge:
    """Sum of two charges."""
    return tuple(p + q for p, q in zip(x, y, strict=True))


def subtract(x: Charge, y: Charge) -> Charge:
    """Difference of two charges."""
    return tuple(p - q for p, q in zip(x, y, strict=True))


@dataclass(frozen=True, eq=False)
class SiteOperator:
    """Operator on one site that sends each local state to at most one other: state -> (state, factor)."""

    shift: Charge
    entries: dict[int, tuple[int, float]]

    def __matmul__(self, other: "SiteOperator") -> "SiteOperator":
        """Product self . other (other acts first)."""
        entries = {}
        for state, (middle, factor) in other.entries.items():
            if middle in self.entries:
                target, second = self.entries[middle]
                entries[state] = (target, factor * second)
        return SiteOperator(add(self.shift, other.shift), entries)

    @property
    def adjoint(self) -> "SiteOperator":
        """Transpose (all operators here are real and one-to-one)."""
        entries = {target: (state, factor) for state, (target, factor) in self.entries.items()}
        return SiteOperator(tuple(-x for x in self.shift), entries)


@dataclass(frozen=True, eq=False)
class LocalSpace:
    """Fock states of one site, or (doubled) pairs of a physical and an auxiliary Fock state.

    `physical` lists the occupations (n1[, n2]) of the local states; `charges` what they add to the bond
    charge: the occupations themselves, or physical minus auxiliary where the space is doubled.
    """

    physical: tuple[Charge, ...]
    charges: tuple[Charge, ...]
    auxiliary: tuple[Charge, ...] | None

    @property
    def species(self) -> int:
        """Number of species."""
        return len(self.physical[0])

    @property
    def identity(self) -> SiteOperator:
        """1."""
        return self.diagonal(np.ones(len(self.physical)))

    def diagonal(self, values: Floats) -> SiteOperator:
        """Operator with the given diagonal over the local states."""
        return SiteOperator((0,) * self.species, {s: (s, float(v)) for s, v in enumerate(values)})

    def lower(self, a: int) -> SiteOperator:
        """b_a on the physical occupation."""
        others = self.auxiliary or ((),) * len(self.physical)
        index = {label: s for s, label in enumerate(zip(self.physical, others, strict=True))}
        unit = tuple(int(x == a) for x in range(self.species))
        entries = {
            s: (index[subtract(occupation, unit), other], float(np.sqrt(occupation[a])))
            for (occupation, other), s in index.items()
            if occupation[a] > 0
        }
        return SiteOperator(tuple(-x for x in unit), entries)

    def number(self, a: int) -> SiteOperator:
        """n_a of the physical occupation."""
        return self.diagonal(np.array([occupation[a] for occupation in self.physical], dtype=float))


def fock_space(cutoff: tuple[int, ...], doubled: bool = False) -> LocalSpace:
    """Local space with 0..cutoff atoms per species; doubled: with an auxiliary copy."""
    occupations = tuple(product(*(range(c + 1) for c in cutoff)))
    if not doubled:
        return LocalSpace(occupations, occupations, None)
    pairs = list(product(occupations, occupations))
    charges = tuple(subtract(n, m) for n, m in pairs)
    return LocalSpace(tuple(n for n, _ in pairs), charges, tuple(m for _, m in pairs))


def fuse(bond: Bond, space: LocalSpace, allowed: Callable[[Charge], bool]) -> Fusion:
    """Row layout of the product bond x site: outgoing charge -> (local state, incoming charge) -> rows."""
    fusion: Fusion = {}
    filled: dict[Charge, int] = {}
    for incoming, size in bond.items():
        for s, charge in enumerate(space.charges):
            outgoing = add(incoming, charge)
            if allowed(outgoing):
                start = filled.get(outgoing, 0)
                fusion.setdefault(outgoing, {})[s, incoming] = slice(start, start + size)
                filled[outgoing] = start + size
    return fusion


def fused_sizes(fusion: Fusion) -> Bond:
    """Dimension of every sector of a fused leg."""
    return {charge: max(rows.stop for rows in parts.values()) for charge, parts in fusion.items()}


@dataclass(frozen=True, eq=False)
class SiteTensor:
    """One tensor: outgoing charge -> matrix (rows of the fused leg, outgoing dimension)."""

    fusion: Fusion
    blocks: dict[Charge, Floats]

    @property
    def bond(self) -> Bond:
        """Dimensions of the outgoing bond."""
        return {charge: block.shape[1] for charge, block in self.blocks.items()}


@dataclass(frozen=True, eq=False)
class GrownOperator:
    """A batch of operators on all sites to one side of a bond, in that bond's basis.

    blocks[q] has shape (bra dimension, batch, ket dimension) with ket charge q and bra charge q + shift; this
    layout makes both multiplications by a site tensor plain matrix products. For operators on the right of a
    bond, q is still the charge to its left, and `shift` is minus the charge the operators add.
    """

    shift: Charge
    batch: int
    blocks: dict[Charge, Floats]

    @staticmethod
    def identity(bond: Bond) -> "GrownOperator":
        """1 in the given basis (the left side of a left-orthonormal chain)."""
        shift = (0,) * len(next(iter(bond)))
        return GrownOperator(shift, 1, {q: np.eye(size)[:, None, :] for q, size in bond.items()})


def grow_left(grown: GrownOperator, site: SiteOperator, tensor: SiteTensor) -> GrownOperator:
    """Operators left of a site times an operator on the site: in the basis right of the site."""
    shift = add(grown.shift, site.shift)
    count = grown.batch
    blocks = {}
    for q, ket in tensor.blocks.items():
        target = add(q, shift)
        bra = tensor.blocks.get(target)
        if bra is None:
            continue
        partial = np.zeros((bra.shape[0], count * ket.shape[1]))
        touched = False
        for (s, incoming), rows in tensor.fusion[q].items():
            block = grown.blocks.get(incoming)
            if block is None or s not in site.entries:
                continue
            state, factor = site.entries[s]
            bra_rows = tensor.fusion[target].get((state, add(incoming, grown.shift)))
            if bra_rows is not None:
                half = block.reshape(-1, block.shape[2]) @ (factor * ket[rows])
                partial[bra_rows] = half.reshape(block.shape[0], -1)
                touched = True
        if touched:
            blocks[q] = (bra.T @ partial).reshape(bra.shape[1], count, ket.shape[1])
    return GrownOperator(shift, count, blocks)


def grow_right(grown: GrownOperator, site: SiteOperator, tensor: SiteTensor) -> GrownOperator:
    """Operators right of a site times an operator on the site: in the basis left of the site."""
    shift = subtract(grown.shift, site.shift)
    count = grown.batch
    blocks: dict[Charge, Floats] = {}
    for q, ket in tensor.blocks.items():
        block = grown.blocks.get(q)
        if block is None:
            continue
        target = add(q, grown.shift)
        bra = tensor.blocks[target]
        half = bra @ block.reshape(block.shape[0], -1)
        for (s, incoming), rows in tensor.fusion[q].items():
            if s not in site.entries:
                continue
            state, factor = site.entries[s]
            bra_rows = tensor.fusion[target].get((state, add(incoming, shift)))
            if bra_rows is not None:
                piece = half[bra_rows].reshape(-1, ket.shape[1]) @ (factor * ket[rows].T)
                piece = piece.reshape(bra_rows.stop - bra_rows.start, count, -1)
                blocks[incoming] = blocks[incoming] + piece if incoming in blocks else piece
    return GrownOperator(shift, count, blocks)


def overlap(left: GrownOperator, right: GrownOperator) -> Floats:
    """All expectation values <left_m right_n> of two batches that meet at one bond, shape (batch, batch)."""
    result = np.zeros((left.batch, right.batch))
    for q, block in left.blocks.items():
        other = right.blocks.get(q)
        if other is not None:
            result += block.transpose(1, 0, 2).reshape(left.batch, -1) @ (
                other.transpose(1, 0, 2).reshape(right.batch, -1).T
            )
    return result


def merge(parts: list[GrownOperator]) -> GrownOperator:
    """One batch from several (at least one) with the same shift, in order; missing blocks count as zero."""
    shift = parts[0].shift
    blocks = {}
    for q in {q for part in parts for q in part.blocks}:
        shape = next(part.blocks[q].shape for part in parts if q in part.blocks)
        pieces = [part.blocks.get(q, np.zeros((shape[0], part.batch, shape[2]))) for part in parts]
        blocks[q] = np.concatenate(pieces, axis=1)
    return GrownOperator(shift, sum(part.batch for part in parts), blocks)


@dataclass(frozen=True, eq=False)
class TensorChain:
    """Normalised matrix-product state in left-orthonormal form: every tensor but the last is an isometry."""

    space: LocalSpace
    tensors: tuple[SiteTensor, ...]

    @property
    def bond_dimensions(self) -> NDArray[np.int64]:
        """Number of states kept on each inner bond, shape (sites - 1,)."""
        return np.array([sum(tensor.bond.values()) for tensor in self.tensors[:-1]])

    @property
    def identities(self) -> list[GrownOperator]:
        """1 on everything left of each site, in the basis of the bond left of the site."""
        bonds = [{(0,) * self.space.species: 1}, *(tensor.bond for tensor in self.tensors[:-1])]
        return [GrownOperator.identity(bond) for bond in bonds]

    @cached_property
    def densities(self) -> tuple[GrownOperator, ...]:
        """Density matrix of everything left of bond i, i = 0..sites (bond i lies left of site i)."""
        (total,) = self.tensors[-1].bond
        right = [GrownOperator((0,) * len(total), 1, {total: np.ones((1, 1, 1))})]
        for tensor in reversed(self.tensors):
            right.append(grow_right(right[-1], self.space.identity, tensor))
        return tuple(reversed(right))
