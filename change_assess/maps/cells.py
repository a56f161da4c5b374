"""Fixed cells of a raster, the ranks of its pixels, and reading single pixels.

A raster is cut into cells of 512 by 512 pixels. The pixels that hold one code have ranks: cell by cell in raster
order, and in raster order inside a cell. Ranks do not depend on how the file is stored.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from rasterio.windows import Window

from change_assess.errors import InputError
from change_assess.maps.grid import Grid, MapStack, Progress, Reader, block_cache

CELL = 512
"""Side of the cells, in pixels. With another value the same seed would give another sample."""

FEW_CODES = 24


def cell_counts(stack: MapStack, codes: Sequence[int], progress: Progress | None = None) -> NDArray[np.int64]:
    """Count the pixels of each code in each cell of the first map.

    Returns
    -------
    ndarray of int64, shape (cell rows, cell columns, codes)
        Pixels.

    Raises
    ------
    InputError
        If the map holds other codes, apart from 0 and its no-data code.
    """
    grid, done = stack.grid, 0
    counts = np.zeros((-(-grid.height // CELL), -(-grid.width // CELL), len(codes)), dtype=np.int64)
    empty = sorted({0, stack.bands[0].nodata or 0} - set(codes))
    with block_cache(stack), Reader(stack) as reader:
        for window in stack.windows(multiple=CELL):
            for cell, part in _parts(reader.read(0, window), window):
                found = _histogram(part, [*codes, *empty])
                if found.sum() < part.size:
                    _refuse_other_codes(part, [*codes, *empty], stack)
                counts[cell] = found[: len(codes)]
            done += window.height * window.width
            if progress:
                progress(done, grid.height * grid.width)
    return counts


def _parts(block: NDArray[Any], window: Window) -> Iterator[tuple[tuple[int, int], NDArray[Any]]]:
    """The cells of a window that starts at the corner of a cell: row and column of the cell, and its pixels."""
    for top in range(0, window.height, CELL):
        for left in range(0, window.width, CELL):
            cell = (window.row_off + top) // CELL, (window.col_off + left) // CELL
            yield cell, block[top : top + CELL, left : left + CELL]


def _histogram(block: NDArray[Any], codes: Sequence[int]) -> NDArray[np.int64]:
    if len(codes) > FEW_CODES:
        return np.bincount(block.reshape(-1), minlength=max(codes) + 1)[list(codes)]
    mask = np.empty(block.shape, dtype=np.bool_)
    return np.array([np.count_nonzero(np.equal(block, code, out=mask)) for code in codes], dtype=np.int64)


def _refuse_other_codes(block: NDArray[Any], codes: Sequence[int], stack: MapStack) -> None:
    other = sorted(set(np.unique(block).tolist()) - set(codes))
    raise InputError(
        f"it holds codes that are not in the strata table: {', '.join(map(str, other[:5]))}",
        file=stack.bands[0].path,
        value=other[0],
        mend="Use the raster and the table that were made together.",
    )


def pixels_of_ranks(
    stack: MapStack,
    codes: Sequence[int],
    counts: NDArray[np.int64],
    position: NDArray[np.intp],
    rank: NDArray[np.int64],
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Rows and columns of the pixels that have given ranks; reads only the cells that hold them.

    Parameters
    ----------
    stack : MapStack
        Its first map is read.
    codes, counts
        Codes, and their pixels by cell as `cell_counts` gives them.
    position : ndarray of int, shape (n,)
        Position in `codes` of the code of each pixel.
    rank : ndarray of int, shape (n,)
        Rank of each pixel among those of its code, from 0.
    """
    cell, within = np.zeros(len(rank), dtype=np.int64), np.zeros(len(rank), dtype=np.int64)
    for p in np.unique(position):
        mine, in_cell = position == p, counts[:, :, p].reshape(-1)
        ends = np.cumsum(in_cell)
        cell[mine] = np.searchsorted(ends, rank[mine], side="right")
        within[mine] = rank[mine] - (ends - in_cell)[cell[mine]]
    rows, columns = np.zeros_like(cell), np.zeros_like(cell)
    with block_cache(stack, cut_blocks=True), Reader(stack) as reader:
        for window, here in _cells_in_use(stack.grid, cell):
            flat = reader.read(0, window).reshape(-1)
            for p in np.unique(position[here]):
                mine = here[position[here] == p]
                pixel = np.flatnonzero(flat == codes[p])[within[mine]]
                rows[mine], columns[mine] = (
                    window.row_off + pixel // window.width,
                    window.col_off + pixel % window.width,
                )
    return rows, columns


def codes_at(stack: MapStack, rows: NDArray[np.int64], columns: NDArray[np.int64]) -> NDArray[np.int64]:
    """Codes of every map at n pixels, shape (maps, n)."""
    codes = np.zeros((len(stack.bands), len(rows)), dtype=np.int64)
    cell = rows // CELL * _across(stack.grid) + columns // CELL
    with block_cache(stack, cut_blocks=True), Reader(stack) as reader:
        for window, here in _cells_in_use(stack.grid, cell):
            at = rows[here] - window.row_off, columns[here] - window.col_off
            for i, block in enumerate(reader.read_all(window)):
                codes[i, here] = block[at]
    return codes


def _across(grid: Grid) -> int:
    return -(-grid.width // CELL)


def _cells_in_use(grid: Grid, cell: NDArray[np.int64]) -> Iterator[tuple[Window, NDArray[np.intp]]]:
    """Window of each cell that occurs, in raster order, and the positions at which it occurs."""
    order = np.argsort(cell, kind="stable")
    numbers, starts = np.unique(cell[order], return_index=True)
    for number, here in zip(numbers.tolist(), np.split(order, starts[1:]), strict=True):
        top, left = CELL * (number // _across(grid)), CELL * (number % _across(grid))
        yield Window(left, top, min(CELL, grid.width - left), min(CELL, grid.height - top)), here
