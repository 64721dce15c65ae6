"""Image files in: known to be whole, 8 bit and of sensible size before a pixel is decoded."""

import re
import struct
import zlib
from dataclasses import dataclass
from pathlib import Path

import cv2
import numpy as np
from cv2.utils import logging
from numpy.typing import NDArray

from cameras.faults import InputFault, printable

Image = NDArray[np.uint8]
MOST_PIXELS = 100_000_000
MOST_BYTES = 512 * 1024 * 1024

_IN_SCAN = re.compile(rb"\xff[^\x00\xd0-\xd7\xff]")  # what ends a JPEG's entropy-coded data: any other marker
_BARE_MARKERS = frozenset([0x01, *range(0xD0, 0xD9)])
_FRAME_MARKERS = frozenset(range(0xC0, 0xD0)) - {0xC4, 0xC8, 0xCC}


@dataclass(frozen=True)
class ImageHeader:
    """What a file says of its image: height and width in pixels, bits a channel, and whether the file is all there."""

    height: int
    width: int
    bits: int
    whole: bool


def read_image(path: Path, place: str = "") -> Image:
    """An image file as (h, w) grey or (h, w, 3) blue-green-red uint8; an orientation tag is not followed.

    Raises InputFault naming `path` and `place` for a file that is missing, cut short, damaged, not a PNG, JPEG, TIFF
    or BMP, not 8 bit, or of more than MOST_PIXELS.
    """
    data = _bytes(path, place)
    header = image_header(data, path, place)
    image = _decoded(data)
    if image is None or image.shape[:2] != (header.height, header.width) or image.dtype != np.uint8:
        raise InputFault(path, place, "cannot be decoded", "export or copy the image again")
    if image.ndim == 3:
        image = image[:, :, 0] if image.shape[2] < 3 else image[:, :, :3]
    return np.ascontiguousarray(image, dtype=np.uint8)


def _decoded(data: bytes) -> NDArray[np.generic] | None:
    level = logging.getLogLevel()
    logging.setLogLevel(logging.LOG_LEVEL_SILENT)  # what is wrong is told once, in our words
    try:
        return cv2.imdecode(np.frombuffer(data, np.uint8), cv2.IMREAD_UNCHANGED)
    except cv2.error:
        return None
    finally:
        logging.setLogLevel(level)


def read_image_size(path: Path, place: str = "") -> tuple[int, int]:
    """Height and width an image file claims; the pixels are not decoded. Raises InputFault as `read_image` does."""
    header = image_header(_bytes(path, place), path, place)
    return header.height, header.width


def image_header(data: bytes, path: Path, place: str = "") -> ImageHeader:
    """Header of an image file's bytes, checked. Raises InputFault as `read_image` does."""
    for start, reader in _READERS:
        if data.startswith(start):
            try:
                header = reader(data)
            except (struct.error, IndexError, KeyError, ValueError):  # the fields of the header lie beyond the end
                header = ImageHeader(1, 1, 8, whole=False)
            break
    else:
        raise InputFault(path, place, "not a PNG, JPEG, TIFF or BMP image" if data else "an empty file",
                         "give an 8-bit image in one of these formats")
    if header.height < 1 or header.width < 1 or header.height * header.width > MOST_PIXELS:
        raise InputFault(path, place, f"an image of {header.width} x {header.height} pixels",
                         f"give one of 1 to {MOST_PIXELS // 1_000_000} million pixels")
    if header.bits > 8:
        raise InputFault(path, place, f"{header.bits} bits a channel", "save the images with 8")
    if not header.whole:
        raise InputFault(path, place, "the image is cut short or damaged", "export or copy it again")
    return header


def _bytes(path: Path, place: str) -> bytes:
    try:
        if not path.is_file():
            raise InputFault(path, place, "no such image file", "check the path")
        if path.stat().st_size > MOST_BYTES:
            raise InputFault(path, place, f"larger than {MOST_BYTES >> 20} MB", "give an image")
        return path.read_bytes()
    except (OSError, ValueError) as error:
        raise InputFault(path, place, f"cannot be read ({printable(error)})", "check the path") from None


def _png(data: bytes) -> ImageHeader:
    """PNG (ISO/IEC 15948, section 5): chunks of length, type, data, CRC, from IHDR to IEND."""
    width, height, bits = struct.unpack(">IIB", data[16:25])
    at, whole = 8, False
    while not whole and at + 12 <= len(data):
        length, kind = struct.unpack(">I4s", data[at : at + 8])
        end = at + 12 + length
        if end > len(data) or zlib.crc32(data[at + 4 : end - 4]) != int.from_bytes(data[end - 4 : end], "big"):
            break
        at, whole = end, kind == b"IEND"
    return ImageHeader(height, width, bits, whole and data[12:16] == b"IHDR")


def _jpeg(data: bytes) -> ImageHeader:
    """JPEG (ITU-T T.81, annex B): marker segments, entropy-coded data between them, up to the end-of-image marker."""
    at, found = 2, ImageHeader(0, 0, 8, whole=False)
    while at + 2 <= len(data):
        if data[at] != 0xFF:
            break
        marker = data[at + 1]
        if marker == 0xD9:
            return ImageHeader(found.height, found.width, found.bits, whole=True)
        if marker == 0xFF or marker in _BARE_MARKERS:
            at += 1 if marker == 0xFF else 2
            continue
        (length,) = struct.unpack(">H", data[at + 2 : at + 4])
        if marker in _FRAME_MARKERS:
            bits, height, width = struct.unpack(">BHH", data[at + 4 : at + 9])
            found = ImageHeader(height, width, bits, whole=False)
        at += 2 + length
        if marker == 0xDA:
            after = _IN_SCAN.search(data, at)
            at = after.start() if after else len(data)
    if found.height == 0:  # cut before the frame header, which is a sign of damage rather than of size
        return ImageHeader(1, 1, 8, whole=False)
    return found


def _bmp(data: bytes) -> ImageHeader:
    """BMP: file header, then a core (12 bytes) or information header with the size, bits and compression."""
    file_size, pixels_at, header_size = struct.unpack("<2xI4xII", data[:18])
    if header_size == 12:
        width, height, bits = struct.unpack("<HH2xH", data[18:26])
        compression = 0
    else:
        width, height, bits, compression = struct.unpack("<ii2xHI", data[18:34])
    height = abs(height)
    row_bytes = (width * bits + 31) // 32 * 4
    needed = file_size if compression in (1, 2) else pixels_at + row_bytes * height
    return ImageHeader(height, width, 8, whole=pixels_at <= len(data) and needed <= len(data))


def _tiff(data: bytes) -> ImageHeader:
    """TIFF 6.0, section 2: the first directory's size and bits, and whether every strip or tile lies in the file."""
    order = "<" if data.startswith(b"II") else ">"
    (at,) = struct.unpack(order + "I", data[4:8])
    (entries,) = struct.unpack(order + "H", data[at : at + 2])
    if at + 2 + 12 * entries + 4 > len(data):
        raise IndexError
    tags = {}
    for k in range(entries):
        entry = data[at + 2 + 12 * k : at + 14 + 12 * k]
        tag, kind, count = struct.unpack(order + "HHI", entry[:8])
        letter = {1: "B", 3: "H", 4: "I"}.get(kind)
        if letter is None or tag not in _TIFF_TAGS:
            continue
        size = struct.calcsize(letter) * count
        if size > len(data):
            raise IndexError
        (pointer,) = struct.unpack(order + "I", entry[8:])
        field = entry[8 : 8 + size] if size <= 4 else data[pointer : pointer + size]
        tags[tag] = struct.unpack(f"{order}{count}{letter}", field)
    offsets = tags[324] if 324 in tags else tags[273]
    sizes = tags[325] if 325 in tags else tags[279]
    ends = np.array(offsets, np.int64) + np.array(sizes, np.int64) if len(offsets) == len(sizes) else np.zeros(0)
    whole = len(ends) > 0 and bool(ends.max() <= len(data))
    return ImageHeader(tags[257][0], tags[256][0], max(tags.get(258, (1,))), whole)


_TIFF_TAGS = (256, 257, 258, 273, 279, 324, 325)  # width, length, bits; offsets and sizes of strips and of tiles
_READERS = (
    (b"\x89PNG\r\n\x1a\n", _png), (b"\xff\xd8\xff", _jpeg), (b"BM", _bmp), (b"II*\0", _tiff), (b"MM\0*", _tiff),
)  # fmt: skip
