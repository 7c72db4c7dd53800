"""Pixels as a PNG file: nothing in it but size, resolution and pixels, so no date either."""

import struct
import zlib
from concurrent.futures import ThreadPoolExecutor

import numpy as np
from numpy.typing import NDArray

#: Effort of the compression: more gains a few per cent and takes twice the time.
EFFORT = 3
#: Rows that are packed at a time; the bytes depend on it, on the number of threads they do not.
STRIP_ROWS = 512
_SIGNATURE = b"\x89PNG\r\n\x1a\n"
_INCH = 0.0254


def png_of(rgb: NDArray[np.uint8], dpi: float) -> bytes:
    """Pack pixels as a PNG file.

    Parameters
    ----------
    rgb : numpy.ndarray, shape (height, width, 3), uint8
        Colours.
    dpi : float
        Pixels an inch.

    Returns
    -------
    bytes
        The file; the same for the same pixels and the same zlib.
    """
    height, width, _ = rgb.shape
    per_metre = round(dpi / _INCH)
    parts = [
        _SIGNATURE,
        _chunk(b"IHDR", struct.pack(">IIBBBBB", width, height, 8, 2, 0, 0, 0)),
        _chunk(b"pHYs", struct.pack(">IIB", per_metre, per_metre, 1)),
        *_packed(_differences(rgb)),
        _chunk(b"IEND", b""),
    ]
    return b"".join(parts)


def _differences(rgb: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """Give each row as its filter (2, up) and what it differs from the row above."""
    height, width, _ = rgb.shape
    rows = rgb.reshape(height, 3 * width)
    lines = np.empty((height, 1 + 3 * width), np.uint8)
    lines[:, 0] = 2
    lines[0, 1:] = rows[0]
    np.subtract(rows[1:], rows[:-1], out=lines[1:, 1:])
    return lines


def _packed(lines: NDArray[np.uint8]) -> list[bytes]:
    """Compress strips of rows side by side; together they are one stream of zlib."""

    def pack(first: int) -> bytes:
        part = lines[first : first + STRIP_ROWS].data
        packer = zlib.compressobj(EFFORT, zlib.DEFLATED, -zlib.MAX_WBITS, zlib.DEF_MEM_LEVEL)
        is_last = first + STRIP_ROWS >= len(lines)
        return packer.compress(part) + packer.flush(zlib.Z_FINISH if is_last else zlib.Z_FULL_FLUSH)

    with ThreadPoolExecutor(4) as crew:
        strips = list(crew.map(pack, range(0, len(lines), STRIP_ROWS)))
    strips[0] = b"\x78\x01" + strips[0]
    strips[-1] += struct.pack(">I", zlib.adler32(lines.data))
    return [_chunk(b"IDAT", strip) for strip in strips]


def _chunk(kind: bytes, body: bytes) -> bytes:
    return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))
