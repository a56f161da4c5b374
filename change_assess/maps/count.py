"""Counting combinations of class codes over aligned blocks of bytes, as fast as plain numpy allows.

Most pixels keep their class. Blocks are therefore compared eight pixels at a time; pixels that differ are
counted one by one, and the others by a histogram of the first date. All sums are exact whole numbers, so they do
not depend on the order of blocks or on the number of workers.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

Bytes = NDArray[np.uint8]
Whole = NDArray[np.int64]

CHUNK_PIXELS = 1 << 18
"""Pixels worked on at a time; a chunk of each date stays in the processor's second cache."""

PENDING_PIXELS = 1 << 20
"""Changed pixels that are collected before they are counted."""

DENSE_SHARE = 0.8
"""Share of eight-pixel words that differ from which on every pixel is counted as changed."""

FEW_CODES = 24
"""With more codes than this one pass of bincount is cheaper than one comparison per code."""

WEIGHT_BITS = 36
"""Row weights are whole numbers up to 2**36: within 1e-11 of the exact ratio, and exact to add."""

HALF = WEIGHT_BITS // 2
ROW_SUM_WORDS = 128


def whole_weights(areas: NDArray[np.float64]) -> tuple[Whole, float]:
    """Whole-number weights in proportion to `areas`, and the area of one unit of weight."""
    unit = float(areas.max()) / (1 << WEIGHT_BITS)
    return np.rint(areas / unit).astype(np.int64), unit


class CombinationCounts:
    """Running counts of the combinations of codes met, and of their summed row weights.

    Parameters
    ----------
    dates : int
        Number of maps.
    weights : ndarray of int64, shape (rows of the grid,), optional
        Whole-number weight of each row; None where all rows weigh the same.
    """

    def __init__(self, dates: int, weights: Whole | None = None) -> None:
        self.dates, self.weights = dates, weights
        self.totals: dict[bytes, tuple[int, int]] = {}
        self._changed: list[Bytes] = []
        self._rows: list[NDArray[np.intp]] = []
        self._pending = 0
        self._still = np.zeros((256, 2), dtype=np.int64)
        self._still_pixels = 0
        self._order: list[int] = []
        self._mask = np.zeros(0, dtype=np.uint8)

    def add(self, blocks: Sequence[Bytes], top: int) -> None:
        """Count one window: for each date a block of shape (rows, columns) that starts in row `top` of the grid."""
        height, width = blocks[0].shape
        step = max(8, CHUNK_PIXELS // width // 8 * 8)
        for start in range(0, height, step):
            self._add_chunk([b[start : start + step] for b in blocks], top + start)

    def finish(self) -> dict[bytes, tuple[int, int]]:
        """Counts and summed weights of every combination met, keyed by its bytes, one byte a date."""
        self._flush_changed()
        self._flush_still()
        return {key: total for key, total in self.totals.items() if total[0]}

    def _add_chunk(self, chunk: Sequence[Bytes], top: int) -> None:
        flat = [c.reshape(-1) for c in chunk]
        found = _changed_pixels(flat)
        if found is None:
            rows = None if self.weights is None else _rows_of(np.arange(flat[0].size), chunk[0].shape[1], top)
            self._count(np.stack(flat), rows, borrowed=False)
            return
        self._histogram(chunk[0], top)
        pixels, places = found
        self._changed.append(pixels)
        if self.weights is not None:
            self._rows.append(_rows_of(places, chunk[0].shape[1], top))
        self._pending += len(places)
        self._still_pixels += flat[0].size
        if self._pending > PENDING_PIXELS:
            self._flush_changed()
        if self._still_pixels > 1 << (62 - WEIGHT_BITS - 1):
            self._flush_still()

    def _histogram(self, block: Bytes, top: int) -> None:
        """Add a block of the first date to the histogram, most frequent code first."""
        left = block.size
        if len(self._order) <= FEW_CODES:
            for code in self._order:
                left -= self._count_code(block, top, code)
                if not left:
                    return
        self._histogram_of_rest(block, top, left)

    def _count_code(self, block: Bytes, top: int, code: int) -> int:
        height, width = block.shape
        words = -(-width // (8 * ROW_SUM_WORDS)) * ROW_SUM_WORDS if self.weights is not None else 0
        mask = self._mask_of(height, width, words)
        np.equal(block, code, out=mask[:, :width].view(np.bool_))
        if self.weights is None:
            found = int(np.count_nonzero(mask.view(np.bool_)))
        else:
            in_row = _row_sums(mask)
            found = int(in_row.sum())
            self._still[code, 1] += int(in_row @ self.weights[top : top + height])
        self._still[code, 0] += found
        return found

    def _mask_of(self, height: int, width: int, words: int) -> Bytes:
        shape = (height, words * 8 or width)
        if shape != tuple(self._mask.shape):
            self._mask = np.zeros(shape, dtype=np.uint8)
        return self._mask

    def _histogram_of_rest(self, block: Bytes, top: int, left: int) -> None:
        """Histogram of the codes that the loop over frequent codes has not counted."""
        by_row = _histogram_by_row(block) if self.weights is not None else _bincount(block)[None, :]
        everything = by_row.sum(axis=0)
        rest = np.setdiff1d(np.flatnonzero(everything), self._order if left < block.size else [])
        self._still[rest, 0] += everything[rest]
        if self.weights is not None:
            self._still[rest, 1] += self.weights[top : top + len(block)] @ by_row[:, rest]
        seen = np.flatnonzero(self._still[:, 0] > 0)
        self._order = [int(c) for c in seen[np.argsort(-self._still[seen, 0], kind="stable")]]

    def _flush_changed(self) -> None:
        if self._pending:
            self._count(np.concatenate(self._changed, axis=1), np.concatenate(self._rows) if self._rows else None)
        self._changed, self._rows, self._pending = [], [], 0

    def _count(self, pixels: Bytes, rows: NDArray[np.intp] | None, *, borrowed: bool = True) -> None:
        """Count pixels one by one; `borrowed` ones were also counted in the histogram and are taken out of it."""
        weights = None if rows is None or self.weights is None else self.weights[rows]
        combinations, units, weight = _count_distinct(pixels, weights)
        for key, n, w in zip(combinations, units.tolist(), weight.tolist(), strict=True):
            self._add_total(key.tobytes(), n, w)
            if borrowed:
                self._still[key[0]] -= (n, w)

    def _flush_still(self) -> None:
        for code in np.flatnonzero(self._still.any(axis=1)):
            self._add_total(bytes([code]) * self.dates, *self._still[code].tolist())
        self._still[:], self._still_pixels = 0, 0

    def _add_total(self, key: bytes, units: int, weight: int) -> None:
        before = self.totals.get(key, (0, 0))
        self.totals[key] = (before[0] + units, before[1] + weight)


def _changed_pixels(flat: Sequence[Bytes]) -> tuple[Bytes, NDArray[np.intp]] | None:
    """Pixels (dates, n) of which any date differs from the first, and their places.

    None if most words of eight pixels differ.
    """
    whole = flat[0].size // 8 * 8
    words = [f[:whole].view(np.uint64) for f in flat]
    differ = np.flatnonzero(_any_differs(words))
    if differ.size > DENSE_SHARE * len(words[0]):
        return None
    taken = [np.concatenate([w[differ].view(np.uint8), f[whole:]]) for w, f in zip(words, flat, strict=True)]
    inside = np.flatnonzero(_any_differs(taken))
    first_of_word = np.append(differ * 8, whole)
    return np.stack([t[inside] for t in taken]), first_of_word[inside >> 3] + (inside & 7)


def _any_differs(arrays: Sequence[NDArray[Any]]) -> NDArray[np.bool_]:
    differs: NDArray[np.bool_] = arrays[0] != arrays[1]
    for other in arrays[2:]:
        differs |= arrays[0] != other
    return differs


def _rows_of(pixels: NDArray[np.intp], width: int, top: int) -> NDArray[np.intp]:
    return pixels // width + top


def _row_sums(mask: Bytes) -> Whole:
    """Row sums of zeros and ones, eight columns at a time; a byte holds the sum of 128 at most."""
    words = mask.view(np.uint64).reshape(len(mask), -1, ROW_SUM_WORDS)
    sums: Whole = np.add.reduce(words, axis=2).view(np.uint8).sum(axis=1, dtype=np.int64)
    return sums


def _bincount(block: Bytes) -> Whole:
    return np.bincount(block.reshape(-1), minlength=256)


def _histogram_by_row(block: Bytes) -> Whole:
    height = len(block)
    index = (np.arange(height, dtype=np.int32) << 8)[:, None] + block
    return np.bincount(index.reshape(-1), minlength=height << 8).reshape(height, 256)


def _weighted(index: NDArray[np.integer], weights: Whole, size: int) -> Whole:
    """Exact sums of whole-number weights by index: two halves, each of which a float adds without rounding."""
    high, low = (
        np.bincount(index, half, size).astype(np.int64) for half in (weights >> HALF, weights & ((1 << HALF) - 1))
    )
    total: Whole = (high << HALF) + low
    return total


def _count_distinct(pixels: Bytes, weights: Whole | None) -> tuple[Bytes, Whole, Whole]:
    """Distinct columns of `pixels` (dates, n) as (k, dates), with their counts and summed weights."""
    if len(pixels) == 2:
        code = (pixels[0].astype(np.uint16) << 8) | pixels[1]
        table = np.bincount(code, minlength=1 << 16)
        found = np.flatnonzero(table)
        weight = np.zeros(len(found), np.int64) if weights is None else _weighted(code, weights, 1 << 16)[found]
        return np.stack([found >> 8, found & 255], axis=1).astype(np.uint8), table[found], weight
    combinations, units, values, keys = _distinct_columns(pixels)
    weight = np.zeros(len(units), np.int64)
    if weights is not None:
        weight = _weighted(np.searchsorted(values, keys), weights, len(units))
    return combinations, units, weight


def _distinct_columns(pixels: Bytes) -> tuple[Bytes, Whole, NDArray[np.uint64], NDArray[np.uint64]]:
    """Distinct columns (k, dates), their counts, and the sorted keys of the distinct and of all columns.

    A key packs the bytes of eight dates; from there on, the number of the combination so far and four more dates.
    """
    keys = _packed(pixels[:8])
    values, units = np.unique(keys, return_counts=True)
    combinations = _unpacked(values, min(8, len(pixels)))
    for start in range(8, len(pixels), 4):
        more = pixels[start : start + 4]
        keys = (np.searchsorted(values, keys).astype(np.uint64) << np.uint64(32)) | _packed(more)
        values, units = np.unique(keys, return_counts=True)
        before = combinations[(values >> np.uint64(32)).astype(np.intp)]
        combinations = np.concatenate([before, _unpacked(values, len(more))], axis=1)
    return combinations, units, values, keys


def _packed(pixels: Bytes) -> NDArray[np.uint64]:
    """One little-endian 64-bit number for each column of up to eight bytes."""
    padded = np.zeros((pixels.shape[1], 8), dtype=np.uint8)
    padded[:, : len(pixels)] = pixels.T
    return padded.view("<u8")[:, 0].astype(np.uint64)


def _unpacked(values: NDArray[np.uint64], dates: int) -> Bytes:
    return np.ascontiguousarray(values.astype("<u8")).view(np.uint8).reshape(-1, 8)[:, :dates]
