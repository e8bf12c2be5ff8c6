"""Products of volumes with a kernel's matrix along one axis, shaped so that the processor's BLAS runs at full speed.

A kernel reaches a few voxels, so its matrix is cut into blocks of rows with the columns that count, and each block is
multiplied with all planes of a stack. Block shapes are fixed: a repeated run does the same sums in the same order.
"""

from dataclasses import dataclass

import numpy as np

from evenblur.kernels import PIECE, banded_matrix, split_matrix

ROWS_AT_ONCE = 16
"""Rows of a matrix that are multiplied from the left at once: narrow blocks waste the fewest zeros."""

COLUMNS_AT_ONCE = 32
"""Columns that are multiplied from the right at once: BLAS needs them wider there."""

# Products of up to a hundred cubed multiplications skip OpenBLAS's packing copies, which cost more than they do.
_SMALL_PRODUCT = 1_000_000
# Wider windows than this leave no room for that; their blocks are large ones.
_WIDEST_SMALL = 112
_LARGE_BLOCK = 128


@dataclass(frozen=True)
class Block:
    """A block of matrix rows: results `rows` come from values `window`."""

    rows: slice
    window: slice
    matrix: np.ndarray
    transposed: np.ndarray


@dataclass(frozen=True)
class FarPart:
    """The far part of a split matrix, ready for products: see `evenblur.kernels.SplitMatrix`.

    Each piece of the axis is stored with the `rank` coefficients that it gets from afar behind its own values, so
    that one product over neighbouring pieces adds up both parts.
    """

    pieces: int
    rank: int
    project: np.ndarray
    project_columns: np.ndarray
    exchange: np.ndarray

    @property
    def stored(self) -> int:
        """Length of the axis with all coefficients."""
        return self.pieces * (PIECE + self.rank)


@dataclass(frozen=True)
class AxisProduct:
    """The kernel along one axis as products.

    Attributes
    ----------
    blocks
        The matrix in blocks of rows.
    far
        The far part, where the matrix is split.
    """

    blocks: list[Block]
    far: FarPart | None

    def storage(self, before: tuple[int, ...], after: tuple[int, ...] = ()) -> np.ndarray | None:
        """Room for values and coefficients of a split matrix, with the lengths before and after the axis; or None."""
        return None if self.far is None else np.zeros((*before, self.far.stored, *after), dtype=np.float32)


def axis_product(length: int, *, kind: str, sigma: float, size: int) -> AxisProduct | None:
    """Prepare the kernel along an axis.

    Parameters
    ----------
    length
        Voxels along the axis.
    kind
        `band` or `dense` (the matrix without the weights that do not count) or `split`; others mean no product.
    sigma
        Sigma of the Gaussian, voxels.
    size
        Rows in a block, `ROWS_AT_ONCE` or `COLUMNS_AT_ONCE`.

    Returns
    -------
    AxisProduct or None
        None where no product is to be done.

    Raises
    ------
    ValueError
        If the length is under 1, sigma negative or not finite, or the kernel cannot be split.

    >>> [block.window for block in axis_product(40, kind="band", sigma=0.0, size=32).blocks]
    [slice(0, 32, None), slice(32, 40, None)]
    """
    if kind in ("none", "cosine"):
        return None
    if kind == "split":
        return _split_product(length, sigma, size)
    reach, matrix = banded_matrix(length, sigma)
    if size + 2 * reach > _WIDEST_SMALL:
        size = _LARGE_BLOCK
    blocks = []
    for start in range(0, length, size):
        stop = min(start + size, length)
        blocks.append(_block(matrix, slice(start, stop), slice(max(0, start - reach), min(length, stop + reach))))
    return AxisProduct(blocks, None)


def _split_product(length: int, sigma: float, size: int) -> AxisProduct:
    split = split_matrix(length, sigma)
    if split is None:
        raise ValueError(f"no split of a kernel with sigma {sigma} over {length} voxels")
    pieces = len(split.basis)
    wide = PIECE + split.rank
    stored = np.zeros((pieces * PIECE, pieces, wide), dtype=np.float32)
    for piece in range(pieces):
        part = split.near[:, piece * PIECE : (piece + 1) * PIECE]
        stored[:length, piece, : part.shape[1]] = part
        stored[piece * PIECE : (piece + 1) * PIECE, piece, PIECE:] = split.basis[piece]
    matrix = stored.reshape(pieces * PIECE, pieces * wide)
    blocks = []
    for start in range(0, length, size):
        stop = min(start + size, length)
        first, beyond = max(0, start // PIECE - 1), min(pieces, -(-stop // PIECE) + 1)
        blocks.append(_block(matrix, slice(start, stop), slice(first * wide, beyond * wide)))
    far = FarPart(
        pieces=pieces,
        rank=split.rank,
        project=np.ascontiguousarray(split.basis.transpose(0, 2, 1)),
        project_columns=np.ascontiguousarray(split.basis),
        exchange=split.exchange,
    )
    return AxisProduct(blocks, far)


def _block(matrix: np.ndarray, rows: slice, window: slice) -> Block:
    part = np.ascontiguousarray(matrix[rows, window])
    return Block(rows, window, part, np.ascontiguousarray(part.T))


def along_rows(stack: np.ndarray, *, product: AxisProduct, out: np.ndarray, stored: np.ndarray | None) -> None:
    """Multiply each plane of a stack from the left.

    Parameters
    ----------
    stack
        float32 (planes, rows, columns); `product` is made for its rows.
    product
        As `axis_product` makes it, with `ROWS_AT_ONCE`.
    out
        Where the result goes, as large as the stack; it may be the stack itself where the matrix is split, and must not
        overlap it otherwise.
    stored
        The product's `storage((planes,), (columns,))`, or larger in its first axis.

    >>> stack, out = np.ones((1, 4, 3), np.float32), np.empty((1, 4, 3), np.float32)
    >>> along_rows(stack, product=axis_product(4, kind="dense", sigma=1.0, size=16), out=out, stored=None)
    >>> bool(abs(out - 1).max() < 1e-6)
    True
    """
    if product.far is not None and stored is not None:
        far = product.far
        planes, rows, columns = stack.shape
        stored = stored[:planes]
        by_piece = stored.reshape(planes, far.pieces, PIECE + far.rank, columns)
        whole, rest = divmod(rows, PIECE)
        by_piece[:, :whole, :PIECE] = stack[:, : whole * PIECE].reshape(planes, whole, PIECE, columns)
        if rest:
            by_piece[:, whole, :rest] = stack[:, whole * PIECE :]
        given = np.matmul(far.project, by_piece[:, :, :PIECE]).reshape(planes, -1, columns)
        by_piece[:, :, PIECE:] = np.matmul(far.exchange, given).reshape(planes, far.pieces, far.rank, columns)
        stack = stored
    for block in product.blocks:
        for part in _parts(stack.shape[2], block.matrix.size):
            np.matmul(block.matrix, stack[:, block.window, part], out=out[:, block.rows, part])


def along_columns(stack: np.ndarray, *, product: AxisProduct, out: np.ndarray, stored: np.ndarray | None) -> None:
    """Multiply each plane of a stack from the right.

    Parameters
    ----------
    stack
        float32 (planes, rows, columns); `product` is made for its columns.
    product
        As `axis_product` makes it, with `COLUMNS_AT_ONCE`.
    out
        Where the result goes, as large as the stack and not overlapping it.
    stored
        The product's `storage((planes, rows))`, or larger in its first axis.

    >>> stack, out = np.ones((1, 3, 4), np.float32), np.empty((1, 3, 4), np.float32)
    >>> along_columns(stack, product=axis_product(4, kind="dense", sigma=1.0, size=32), out=out, stored=None)
    >>> bool(abs(out - 1).max() < 1e-6)
    True
    """
    if product.far is not None and stored is not None:
        far = product.far
        planes, rows, columns = stack.shape
        stored = stored[:planes]
        by_piece = stored.reshape(planes, rows, far.pieces, PIECE + far.rank)
        whole, rest = divmod(columns, PIECE)
        by_piece[:, :, :whole, :PIECE] = stack[:, :, : whole * PIECE].reshape(planes, rows, whole, PIECE)
        if rest:
            by_piece[:, :, whole, :rest] = stack[:, :, whole * PIECE :]
        # The product of pieces takes its rows from everywhere, so it is told to work on a view with the pieces first.
        lines = by_piece.reshape(-1, far.pieces, PIECE + far.rank)
        given = np.matmul(lines[:, :, :PIECE].transpose(1, 0, 2), far.project_columns)
        given = given.transpose(1, 0, 2).reshape(len(lines), -1)
        lines[:, :, PIECE:] = np.matmul(given, far.exchange).reshape(len(lines), far.pieces, far.rank)
        stack = stored
    for block in product.blocks:
        for part in _parts(stack.shape[1], block.matrix.size):
            np.matmul(stack[:, part, block.window], block.transposed, out=out[:, part, block.rows])


def _parts(length: int, matrix_size: int) -> list[slice]:
    """Cut the other axis so that a product stays small, in equal parts; a wide window takes it whole."""
    most = _SMALL_PRODUCT // matrix_size
    if most < 32 or most >= length:
        return [slice(0, length)]
    count = -(-length // most)
    size = -(-length // count)
    return [slice(start, min(start + size, length)) for start in range(0, length, size)]
