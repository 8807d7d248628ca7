"""Configurations as integers, and site permutations as look-up tables on them.

A configuration packs one digit per site, digit = m + S (0 … 2S), into a field of
⌈log₂(2S+1)⌉ bits, site 0 lowest: for spin ½ that is one bit per site, 1 meaning up.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

CHUNK_BITS = 8
MAX_BITS = 62

Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False)
class Encoding:
    """How the digits of N sites lie in an int64.

    ``dimension``, ``shift``, ``mask`` have shape (N,). Whole sites are gathered in chunks of
    at most 8 bits: chunk k holds the sites ``chunk_site[k]:chunk_site[k+1]``, starts at bit
    ``chunk_shift[k]``; a permutation is then a few table look-ups per configuration.
    """

    dimension: Ints
    shift: Ints
    mask: Ints
    chunk_site: Ints
    chunk_shift: Ints
    chunk_mask: Ints

    @property
    def n_sites(self) -> int:
        """Number of sites N."""
        return len(self.dimension)


def encode(twice_spin: Ints) -> Encoding:
    """The encoding of sites with the given 2S; needs at most 62 bits in all."""
    dimension = np.asarray(twice_spin, dtype=np.int64) + 1
    width = np.array([int(d - 1).bit_length() for d in dimension], dtype=np.int64)
    shift = np.concatenate([[0], np.cumsum(width)])
    starts = [0]
    for site in range(len(width)):
        if shift[site + 1] - shift[starts[-1]] > CHUNK_BITS:
            starts.append(site)
    bounds = np.array([*starts, len(width)], dtype=np.int64)
    sizes = shift[bounds[1:]] - shift[bounds[:-1]]
    return Encoding(
        dimension,
        shift[:-1],
        (np.int64(1) << width) - 1,
        bounds,
        shift[bounds[:-1]],
        (np.int64(1) << sizes) - 1,
    )


def element_tables(encoding: Encoding, permutations: Ints, reverse: NDArray[np.bool_]) -> Ints:
    """Images of every chunk value under each element, shape (G, chunks, 256 or more).

    The image of a configuration is the sum of its chunks' entries. Site i's digit moves to
    site p[i]; with ``reverse`` it also turns from m into −m.
    """
    n_chunks = len(encoding.chunk_shift)
    # A single site of a very large spin may be wider than a chunk.
    width = max(1 << CHUNK_BITS, int(encoding.chunk_mask.max()) + 1)
    tables = np.zeros((len(permutations), n_chunks, width), dtype=np.int64)
    for k in range(n_chunks):
        sites = np.arange(encoding.chunk_site[k], encoding.chunk_site[k + 1])
        local = np.arange(encoding.chunk_mask[k] + 1)
        for i in sites:
            digit = (local >> (encoding.shift[i] - encoding.chunk_shift[k])) & encoding.mask[i]
            target = encoding.shift[permutations[:, i]]
            turned = np.where(reverse[:, None], encoding.dimension[i] - 1 - digit, digit)
            # A bit pattern beyond 2S never occurs in a configuration.
            turned = np.where(digit < encoding.dimension[i], turned, 0)
            tables[:, k, : len(local)] += turned << target[:, None]
    return tables


@dataclass(frozen=True, eq=False)
class HalfLists:
    """All configurations of the lower and the upper half of the sites, ready to be joined.

    ``low`` is sorted by class of 2M and then by value, ``low_start[c]:low_start[c+1]`` being
    the class ``classes[c]``; ``high`` ascends. ``partner[h]`` is the class of the low half
    that completes high configuration h to the wanted 2M, −1 for none.
    """

    low: Ints
    low_start: Ints
    high: Ints
    partner: Ints


def _half(encoding: Encoding, twice_spin: Ints, sites: range) -> tuple[Ints, Ints]:
    values = np.zeros(1, dtype=np.int64)
    twice_m = np.zeros(1, dtype=np.int64)
    for i in sites:
        digit = np.arange(encoding.dimension[i])
        values = (values[None, :] + (digit << encoding.shift[i])[:, None]).ravel()
        twice_m = (twice_m[None, :] + (2 * digit - twice_spin[i])[:, None]).ravel()
    return values, twice_m


def half_lists(encoding: Encoding, twice_spin: Ints, twice_m: int, modulus: int) -> HalfLists:
    """Halves whose joins are exactly the configurations of one 2M (or class of 2M)."""
    total = np.cumsum(np.log(encoding.dimension))
    split = int(np.searchsorted(total, total[-1] / 2)) if encoding.n_sites > 1 else 0
    low, low_m = _half(encoding, twice_spin, range(split))
    high, high_m = _half(encoding, twice_spin, range(split, encoding.n_sites))
    wanted = twice_m - high_m
    if modulus:
        low_m, wanted = low_m % (2 * modulus), wanted % (2 * modulus)
    order = np.lexsort((low, low_m))
    classes, starts = np.unique(low_m[order], return_index=True)
    where = np.clip(np.searchsorted(classes, wanted), 0, len(classes) - 1)
    partner = np.where(classes[where] == wanted, where, -1)
    return HalfLists(low[order], np.append(starts, len(low)).astype(np.int64), high, partner)
