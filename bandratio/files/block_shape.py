"""How large the blocks are in which a file is read: whole tiles of its own, and small enough for any memory."""

from __future__ import annotations

from collections.abc import Sequence

__all__ = ["block_shape"]

#: Most pixels in a block; with some ten output planes of float32, a block in work takes about 100 MB.
_PIXELS = 1 << 20
#: Most bytes of input in a block, all bands as float32.
_INPUT_BYTES = 64 << 20
#: A tile of the file larger than this many blocks is not read whole.
_LARGEST_TILE = 4


def block_shape(
    size: Sequence[int], bands: int, tile: Sequence[int] | None, *, free: bool = False
) -> tuple[int, int]:
    """Rows and columns of the blocks to read.

    Parameters
    ----------
    size : (int, int)
        Rows and columns of the file.
    bands : int
        Number of bands.
    tile : (int, int) or None
        Rows and columns of the file's own tiles or strips.
    free : bool
        The file is not compressed, so that any part of it is read as cheaply as another.

    Examples
    --------
    >>> block_shape((20000, 20000), 4, (256, 256))
    (1024, 1024)
    >>> block_shape((20000, 20000), 4, (1, 20000), free=True)
    (256, 4096)
    """
    rows, columns = (max(1, int(n)) for n in size)
    pixels = max(1 << 14, min(_PIXELS, _INPUT_BYTES // (4 * max(bands, 1))))
    if tile is None or (free and tile[1] >= columns) or tile[0] * tile[1] > _LARGEST_TILE * pixels:
        wide = min(columns, 4096)
        # a power of two, so that overviews can be made within a block
        high = 1 << max(0, (pixels // wide).bit_length() - 1)
        return min(rows, high), wide
    tile_rows, tile_columns = (max(1, min(int(t), n)) for t, n in zip(tile, (rows, columns), strict=True))
    if tile_columns >= columns:
        high = max(1, pixels // (columns * tile_rows)) * tile_rows
        even = high // 8 * 8
        return min(rows, even if even and even % tile_rows == 0 else high), columns
    side = min(int(pixels**0.5), pixels // tile_columns)
    high = max(1, side // tile_rows) * tile_rows
    wide = max(1, pixels // (high * tile_columns)) * tile_columns
    return min(rows, high), min(columns, wide)
