"""Reading image files: what other programs wrote comes back exactly, what is damaged is refused.

Files are written by Pillow, imagecodecs, tifffile and numpy. What these cannot write (PNG of few
bits or interlaced, BMP with alpha, edited headers) is put together here.
"""

import errno
import functools
import gc
import io
import itertools
import struct
import tracemalloc
import warnings
import zipfile
import zlib
from fractions import Fraction

import fsspec
import imagecodecs
import numpy as np
import pytest
import tifffile
from PIL import Image

from mfeat import images, locations
from mfeat._pages import OutOfResources, UnreadableImage
from mfeat.images import grey_rows, open_pages, read_image, scan

ROWS, COLS = 19, 23

# Making pixels and files --------------------------------------------------------------------


def noise(dtype, *shape, seed=0, below=None):
    """Pixels over the whole range of a type, or below a number."""
    rng = np.random.default_rng(seed)
    shape = shape or (ROWS, COLS)
    dtype = np.dtype(dtype)
    if dtype.kind == "f":
        return rng.normal(size=shape).astype(dtype)
    if dtype.kind == "b":
        return rng.integers(0, 2, shape).astype(bool)
    limits = np.iinfo(dtype)
    high = limits.max if below is None else below - 1
    low = limits.min if below is None else 0
    native = dtype.newbyteorder("=")
    return rng.integers(low, high, shape, dtype=native, endpoint=True).astype(dtype)


def ramp(dtype=np.uint8):
    """Smooth pixels, which every codec shortens."""
    return (3 * np.add.outer(np.arange(ROWS), np.arange(COLS))).astype(dtype)


def pil(pixels, kind, **options):
    picture = pixels if isinstance(pixels, Image.Image) else Image.fromarray(pixels)
    stream = io.BytesIO()
    picture.save(stream, kind, **options)
    return stream.getvalue()


def tif(pixels, **options):
    stream = io.BytesIO()
    tifffile.imwrite(stream, pixels, **{"photometric": "minisblack", **options})
    return stream.getvalue()


def npy(pixels, version=None):
    stream = io.BytesIO()
    np.lib.format.write_array(stream, np.asanyarray(pixels), version)
    return stream.getvalue()


def npz(compressed=False, **arrays):
    stream = io.BytesIO()
    (np.savez_compressed if compressed else np.savez)(stream, **arrays)
    return stream.getvalue()


def zipped(**members):
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, data in members.items():
            archive.writestr(name.replace("_", "."), data)
    return stream.getvalue()


def chunk(kind, data):
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


# Pixels of the seven passes (W3C PNG specification, third edition, section 8.1):
# first row, first column, step of rows, step of columns.
ADAM7 = [
    *((0, 0, 8, 8), (0, 4, 8, 8), (4, 0, 8, 4), (0, 2, 4, 4)),
    *((2, 0, 4, 2), (0, 1, 2, 2), (1, 0, 2, 1)),
]


def png(pixels, colour_type, depth, *chunks, interlaced=False, size=None):
    """A PNG put together by hand, of rows without filters."""
    rows, cols = size or pixels.shape[:2]
    raw = b""
    for top, left, down, right in ADAM7 if interlaced else [(0, 0, 1, 1)]:
        for row in pixels[top::down, left::right]:
            if depth >= 8:
                packed = row.astype(f">u{depth // 8}").tobytes()
            else:
                bits = "".join(format(value, f"0{depth}b") for value in row)
                bits += "0" * (-len(bits) % 8)
                packed = bytes(int(bits[k : k + 8], 2) for k in range(0, len(bits), 8))
            raw += b"\0" + packed if packed else b""
    head = struct.pack(">IIBBBBB", cols, rows, depth, colour_type, 0, 0, interlaced)
    parts = [(b"IHDR", head), *chunks, (b"IDAT", zlib.compress(raw)), (b"IEND", b"")]
    return b"\x89PNG\r\n\x1a\n" + b"".join(chunk(*part) for part in parts)


def bmp(packed_rows, cols, bits, palette=(), masks=()):
    """A BMP put together by hand, from rows of bytes, top to bottom."""
    head = struct.pack(
        "<IiiHHIIiiII",
        *(108 if masks else 40, cols, len(packed_rows), 1, bits, 3 if masks else 0),
        *(0, 0, 0, len(palette), 0),
    )
    if masks:
        head += struct.pack("<4I", *masks) + bytes(52)
    head += b"".join(bytes([blue, green, red, 0]) for red, green, blue in palette)
    body = b"".join(row + bytes(-len(row) % 4) for row in reversed(packed_rows))
    start = 14 + len(head)
    return b"BM" + struct.pack("<IHHI", start + len(body), 0, 0, start) + head + body


def bgra(pixels):
    return bmp(
        [row[:, [2, 1, 0, 3]].tobytes() for row in pixels],
        pixels.shape[1],
        32,
        masks=(0xFF0000, 0xFF00, 0xFF, 0xFF000000),
    )


def edited(data, changes, page=0):
    """A TIFF with tags changed: {tag: value}, {(tag, index): value}, {(tag, "code"): tag} ..."""
    out = bytearray(data)
    with tifffile.TiffFile(io.BytesIO(data)) as tiff:
        order, tags = tiff.byteorder, tiff.pages[page].tags
        for key, value in changes.items():
            code, which = key if isinstance(key, tuple) else (key, 0)
            tag = tags[code]
            if which == "code":
                struct.pack_into(f"{order}H", out, tag.offset, value)
            elif which == "count":
                struct.pack_into(f"{order}I", out, tag.offset + 4, value)
            else:
                form = {3: "H", 4: "I", 16: "Q"}[int(tag.dtype)]
                at = tag.valueoffset + which * struct.calcsize(form)
                struct.pack_into(f"{order}{form}", out, at, value)
    return bytes(out)


def chained(data, page, following):
    """A TIFF whose directory of one page points to another place."""
    out = bytearray(data)
    with tifffile.TiffFile(io.BytesIO(data)) as tiff:
        at = tiff.pages[page].offset
    [count] = struct.unpack_from("<H", data, at)
    struct.pack_into("<I", out, at + 2 + 12 * count, following)
    return bytes(out)


def directory(data, page):
    with tifffile.TiffFile(io.BytesIO(data)) as tiff:
        return tiff.pages[page].offset


def segment(data, index):
    """First and last byte of a strip or tile."""
    with tifffile.TiffFile(io.BytesIO(data)) as tiff:
        page = tiff.pages[0]
        return page.dataoffsets[index], page.dataoffsets[index] + page.databytecounts[index]


def changed(data, at, what):
    """Data with some bytes replaced; counted from the end if negative."""
    at %= len(data)
    return data[:at] + what + data[at + len(what) :]


GREY, GREY16, COLOUR = noise("u1"), noise("u2"), noise("u1", ROWS, COLS, 3)
MAP = noise("u2", 3, 256, seed=5)
MASKS = noise("u1", below=2)


def with_alpha(dtype, samples):
    return noise(dtype, ROWS, COLS, samples, seed=samples)


def last_first(pixels):
    return np.moveaxis(pixels, -1, 0)


def opaque_except(pixels, value):
    """Alpha of a picture with one transparent grey or colour."""
    top = np.iinfo(pixels.dtype).max
    where = pixels == value if pixels.ndim == 2 else (pixels == value).all(axis=2)
    return np.where(where, 0, top).astype(pixels.dtype)


def indexed_picture(transparency=None):
    picture = Image.frombytes("P", (COLS, ROWS), GREY.tobytes())
    picture.putpalette((MAP >> 8).astype(np.uint8).T.tobytes())
    options = {} if transparency is None else {"transparency": transparency}
    return pil(picture, "PNG", **options)


def bilevel_palette_tiff():
    data = tif(MASKS.astype(bool), extratags=[(65000, "H", 6, MAP[:, :2].ravel().tolist(), True)])
    return edited(data, {262: 3, (65000, "code"): 320})


def two_sizes_tiff():
    stream = io.BytesIO()
    with tifffile.TiffWriter(stream) as writer:
        writer.write(GREY, photometric="minisblack")
        writer.write(GREY[::2, ::2], photometric="minisblack", subfiletype=1)
        writer.write(GREY16[:7], photometric="minisblack", compression="zlib")
        writer.write(GREY > 9, photometric="minisblack", subfiletype=4)
    return stream.getvalue()


def decoded_jpeg(data):
    return imagecodecs.jpeg_decode(data)


SMOOTH3 = np.stack([ramp(), ramp().T.copy().reshape(ROWS, COLS), 255 - ramp()], axis=2)

# Name: a function that returns the file and its pages, each as (rows, columns[, samples]).
# A name begins with the format.
KINDS = {
    "png grey 1": lambda: (pil(Image.fromarray(MASKS * 255).convert("1"), "PNG"), [MASKS * 255]),
    "png grey 2": lambda: (png(GREY // 64, 0, 2), [GREY // 64 * 85]),
    "png grey 4": lambda: (png(GREY // 16, 0, 4), [GREY // 16 * 17]),
    "png grey 8": lambda: (pil(GREY, "PNG"), [GREY]),
    "png grey 16": lambda: (pil(GREY16, "PNG"), [GREY16]),
    "png rgb 8": lambda: (pil(COLOUR, "PNG"), [COLOUR]),
    "png rgb 16": lambda: (imagecodecs.png_encode(noise("u2", ROWS, COLS, 3)),
                           [noise("u2", ROWS, COLS, 3)]),
    "png palette": lambda: (indexed_picture(), [(MAP.T >> 8)[GREY].astype(np.uint8)]),
    "png palette with transparency": lambda: (
        indexed_picture(bytes(range(256))),
        [np.dstack([(MAP.T >> 8)[GREY].astype(np.uint8), GREY])],
    ),
    "png grey and alpha": lambda: (pil(with_alpha("u1", 2), "PNG"), [with_alpha("u1", 2)]),
    "png grey and alpha 16": lambda: (imagecodecs.png_encode(with_alpha("u2", 2)),
                                      [with_alpha("u2", 2)]),
    "png rgba": lambda: (pil(with_alpha("u1", 4), "PNG"), [with_alpha("u1", 4)]),
    "png rgba 16": lambda: (imagecodecs.png_encode(with_alpha("u2", 4)), [with_alpha("u2", 4)]),
    "png one transparent grey": lambda: (
        png(GREY, 0, 8, (b"tRNS", struct.pack(">H", GREY[3, 4]))),
        [np.dstack([GREY, opaque_except(GREY, GREY[3, 4])])],
    ),
    "png one transparent colour": lambda: (
        png(COLOUR, 2, 8, (b"tRNS", COLOUR[3, 4].astype(">u2").tobytes())),
        [np.dstack([COLOUR, opaque_except(COLOUR, COLOUR[3, 4])])],
    ),
    "png gamma is not applied": lambda: (png(GREY, 0, 8, (b"gAMA", struct.pack(">I", 100_000))),
                                         [GREY]),
    "png interlaced 1": lambda: (png(MASKS, 0, 1, interlaced=True), [MASKS * 255]),
    "png interlaced 8": lambda: (png(GREY, 0, 8, interlaced=True), [GREY]),
    "png interlaced rgb 16": lambda: (png(noise("u2", ROWS, COLS, 3), 2, 16, interlaced=True),
                                      [noise("u2", ROWS, COLS, 3)]),
    "jpeg grey": lambda: (data := pil(ramp(), "JPEG"), [decoded_jpeg(data)]),
    "jpeg rgb": lambda: (data := pil(SMOOTH3, "JPEG", subsampling=0), [decoded_jpeg(data)]),
    "jpeg progressive": lambda: (data := pil(ramp(), "JPEG", progressive=True),
                                 [decoded_jpeg(data)]),
    "bmp 1": lambda: (pil(Image.fromarray(MASKS * 255).convert("1"), "BMP"), [MASKS.astype(bool)]),
    "bmp palette of 16": lambda: (
        bmp([bytes.fromhex("".join(map("{:x}".format, row)) + "0") for row in GREY // 16],
            COLS, 4, palette=[(17 * k, 255 - k, k) for k in range(16)]),
        [np.dstack([GREY // 16 * 17, 255 - GREY // 16, GREY // 16])],
    ),
    "bmp palette of 256": lambda: (
        bmp([row.tobytes() for row in GREY], COLS, 8, palette=(MAP.T >> 8).tolist()),
        [(MAP.T >> 8)[GREY].astype(np.uint8)],
    ),
    "bmp grey 8": lambda: (pil(GREY, "BMP"), [GREY]),
    "bmp rgb": lambda: (pil(COLOUR, "BMP"), [COLOUR]),
    "bmp rgba": lambda: (bgra(with_alpha("u1", 4)), [with_alpha("u1", 4)]),
    **{
        f"tiff {dtype}": lambda dtype=dtype: (tif(noise(dtype)), [noise(dtype)])
        for dtype in ("u1", "u2", "u4", "u8", "i1", "i2", "i4", "i8", "f2", "f4", "f8", "?")
    },
    **{
        f"tiff big-endian {dtype}": lambda dtype=dtype: (tif(noise(dtype), byteorder=">"),
                                                         [noise(dtype)])
        for dtype in (">u2", ">i4", ">f4", ">f8")
    },
    **{
        f"tiff {codec} {dtype} strips": lambda codec=codec, dtype=dtype: (
            tif(noise(dtype), compression=codec, rowsperstrip=4), [noise(dtype)])
        for codec in ("lzw", "zlib", "zstd", "packbits") for dtype in ("u1", "u2", "f4", "?")
    },
    **{
        f"tiff {codec} with predictor {dtype}": lambda codec=codec, dtype=dtype: (
            tif(noise(dtype), compression=codec, predictor=True, rowsperstrip=4), [noise(dtype)])
        for codec in ("lzw", "zlib") for dtype in ("u1", "i2", "u4", "f4", "f8")
    },
    "tiff big-endian zlib": lambda: (
        tif(noise(">u2"), byteorder=">", compression="zlib", predictor=True, tile=(16, 16)),
        [noise("u2")],
    ),
    "tiff tiles": lambda: (tif(GREY16, tile=(16, 16)), [GREY16]),
    "tiff one tile": lambda: (tif(GREY16, tile=(32, 32)), [GREY16]),
    "tiff tiles zlib f4": lambda: (tif(noise("f4"), tile=(16, 16), compression="zlib"),
                                   [noise("f4")]),
    "tiff tiles that fit": lambda: (tif(noise("u2", 48, 16), tile=(16, 16)), [noise("u2", 48, 16)]),
    "tiff tiles rgb lzw": lambda: (
        tif(COLOUR, photometric="rgb", tile=(16, 16), compression="lzw", predictor=True), [COLOUR]),
    "tiff strips of one piece": lambda: (tif(GREY16, rowsperstrip=4), [GREY16]),
    "tiff multi-page": lambda: (tif(noise("u2", 3, ROWS, COLS)), list(noise("u2", 3, ROWS, COLS))),
    "tiff multi-page lzw": lambda: (tif(noise("u2", 3, ROWS, COLS), compression="lzw"),
                                    list(noise("u2", 3, ROWS, COLS))),
    "tiff hyperstack": lambda: (
        tif(noise("u2", 2, 3, 1, ROWS, COLS), photometric=None, imagej=True,
            metadata={"axes": "TZCYX"}),
        list(noise("u2", 6, ROWS, COLS)),
    ),
    "tiff thumbnails left out": lambda: (two_sizes_tiff(), [GREY, GREY16[:7]]),
    "tiff big": lambda: (tif(GREY16, bigtiff=True), [GREY16]),
    "tiff big, big-endian, strips": lambda: (
        tif(noise(">f4"), bigtiff=True, byteorder=">", compression="zlib", rowsperstrip=4),
        [noise("f4")],
    ),
    "tiff rgb": lambda: (tif(COLOUR, photometric="rgb"), [COLOUR]),
    "tiff rgb f4": lambda: (tif(noise("f4", ROWS, COLS, 3), photometric="rgb"),
                            [noise("f4", ROWS, COLS, 3)]),
    "tiff rgb plane by plane": lambda: (
        tif(last_first(COLOUR), photometric="rgb", planarconfig="separate"), [COLOUR]),
    "tiff rgb plane by plane, 3x3 pixels": lambda: (
        tif(last_first(COLOUR[:3, :3]), photometric="rgb", planarconfig="separate"),
        [COLOUR[:3, :3]],
    ),
    "tiff rgb plane by plane, strips": lambda: (
        tif(last_first(COLOUR), photometric="rgb", planarconfig="separate", compression="zlib",
            rowsperstrip=4),
        [COLOUR],
    ),
    "tiff rgb plane by plane, tiles": lambda: (
        tif(last_first(COLOUR), photometric="rgb", planarconfig="separate", tile=(16, 16)),
        [COLOUR],
    ),
    "tiff rgb and alpha": lambda: (
        tif(with_alpha("u1", 4), photometric="rgb", extrasamples=["unassalpha"]),
        [with_alpha("u1", 4)],
    ),
    "tiff grey and alpha": lambda: (
        tif(with_alpha("u2", 2), extrasamples=["assocalpha"], planarconfig="contig"),
        [with_alpha("u2", 2)],
    ),
    "tiff palette": lambda: (tif(GREY, photometric="palette", colormap=MAP), [MAP.T[GREY]]),
    "tiff palette lzw": lambda: (
        tif(GREY, photometric="palette", colormap=MAP, compression="lzw", rowsperstrip=4),
        [MAP.T[GREY]],
    ),
    "tiff palette of two": lambda: (bilevel_palette_tiff(), [MAP.T[MASKS]]),
    "tiff white is zero": lambda: (tif(GREY, photometric="miniswhite"), [255 - GREY]),
    "tiff white is zero u2": lambda: (
        tif(GREY16, photometric="miniswhite", compression="lzw", rowsperstrip=4), [65535 - GREY16]),
    "tiff white is zero 1": lambda: (tif(MASKS.astype(bool), photometric="miniswhite"),
                                     [MASKS == 0]),
    "tiff white is zero, 12 bits packed": lambda: (
        tif(GREY16 >> 4, photometric="miniswhite", bitspersample=12), [4095 - (GREY16 >> 4)]),
    "tiff 12 bits packed": lambda: (tif(GREY16 >> 4, bitspersample=12, rowsperstrip=4),
                                    [GREY16 >> 4]),
    "tiff 4 bits packed": lambda: (tif(GREY >> 4, bitspersample=4), [GREY >> 4]),
    "tiff fax": lambda: (
        pil(Image.fromarray(MASKS * 255).convert("1"), "TIFF", compression="group4"),
        [MASKS.astype(bool)],
    ),
    "tiff bits from the right": lambda: (
        edited(tif(imagecodecs.bitorder_encode(GREY), extratags=[(65000, "H", 1, 2, True)]),
               {(65000, "code"): 266}),
        [GREY],
    ),
    "tiff jpeg grey": lambda: (
        data := tif(ramp(), compression="jpeg", rowsperstrip=16),
        [tifffile.imread(io.BytesIO(data))],
    ),
    "tiff jpeg tiles": lambda: (
        data := tif(SMOOTH3, photometric="rgb", compression="jpeg", tile=(16, 16)),
        [tifffile.imread(io.BytesIO(data))],
    ),
    "tiff jpeg with shared tables": lambda: (
        data := pil(SMOOTH3, "TIFF", compression="jpeg"),
        [np.asarray(Image.open(io.BytesIO(data)))],
    ),
    **{
        f"npy {dtype}": lambda dtype=dtype: (npy(noise(dtype)), [noise(dtype)])
        for dtype in ("?", "u1", "i2", "<u4", "i8", "f2", "f4", "f8", ">u2", ">f4", ">f8")
    },
    "npy Fortran order": lambda: (npy(np.asfortranarray(noise("f4"))), [noise("f4")]),
    **{
        f"npy version {version}": lambda version=version: (npy(noise("f4"), (version, 0)),
                                                           [noise("f4")])
        for version in (1, 2, 3)
    },
    "npy rgb": lambda: (npy(COLOUR), [COLOUR]),
    "npy rgb Fortran order": lambda: (npy(np.asfortranarray(COLOUR)), [COLOUR]),
    "npy rgb and alpha": lambda: (npy(with_alpha("u2", 4)), [with_alpha("u2", 4)]),
    "npz": lambda: (npz(heights=noise("f4")), [noise("f4")]),
    "npz compressed": lambda: (npz(True, heights=noise(">f8")), [noise(">f8")]),
    "npz of several": lambda: (
        npz(b=GREY, a=np.asfortranarray(noise("f4", 5, 4)), c=COLOUR),
        [GREY, noise("f4", 5, 4), COLOUR],
    ),
}  # fmt: skip


@functools.cache
def made(kind):
    return KINDS[kind]()


@pytest.fixture
def put(tmp_path):
    """Write bytes to a file and return its place."""

    def write(data, name="image"):
        path = tmp_path / name
        path.write_bytes(data)
        return str(path)

    return write


@pytest.fixture
def remote():
    """Write bytes to the in-memory file system and return the URI."""
    memory = fsspec.filesystem("memory")

    def write(data, name="image"):
        memory.pipe(f"/images/{name}", data)
        return f"memory://images/{name}"

    yield write
    memory.rm("/images", recursive=True)


def same(got, expected):
    """Equal values of one type, whatever the order of bytes, NaN included."""
    assert got.shape == expected.shape
    assert got.dtype.newbyteorder("=") == expected.dtype.newbyteorder("=")
    np.testing.assert_array_equal(got, expected)


# Reading what was written -------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("place", ["put", "remote"])
def test_pixels_come_back_as_they_were_written(request, kind, place):
    data, expected = made(kind)
    location = request.getfixturevalue(place)(data)
    infos = scan(location, channel=0)
    assert len(infos) == len(expected)
    for k, (info, pixels) in enumerate(zip(infos, expected, strict=True)):
        assert (info.page, info.shape) == (k, pixels.shape[:2])
        assert np.dtype(info.dtype).newbyteorder("=") == pixels.dtype.newbyteorder("=")
        samples = np.atleast_3d(pixels)
        for channel in range(samples.shape[2]):
            same(read_image(location, k, channel=channel), samples[..., channel])
        if samples.shape[2] < 3:
            same(read_image(location, k), samples[..., 0])
        else:
            for name, channel in (("red", 0), ("green", 1), ("blue", 2)):
                same(read_image(location, k, channel=name), samples[..., channel])


BY_HAND = ["png grey 2", "png grey 4", "png one transparent colour", "png interlaced 8"]


@pytest.mark.parametrize("kind", [*BY_HAND, "bmp palette of 16", "bmp rgba"])
def test_files_put_together_here_are_what_another_reader_sees(kind):
    data, [expected] = made(kind)
    modes = {1: "L", 3: "RGB", 4: "RGBA"}
    picture = Image.open(io.BytesIO(data)).convert(modes[np.atleast_3d(expected).shape[2]])
    np.testing.assert_array_equal(np.asarray(picture), expected)


@pytest.mark.parametrize("kind", ["png rgb 8", "tiff u2", "npy f4", "bmp grey 8", "jpeg grey"])
def test_the_first_bytes_decide_not_the_name(put, kind):
    data, [expected] = made(kind)
    location = put(data, "picture.gif")
    same(read_image(location, channel=0), np.atleast_3d(expected)[..., 0])


def test_a_path_and_a_file_uri_are_read_alike(tmp_path):
    np.save(tmp_path / "a.npy", GREY)
    same(read_image(tmp_path / "a.npy"), GREY)
    same(read_image(f"file://{tmp_path}/a.npy"), GREY)


# What the header says -----------------------------------------------------------------------


@pytest.mark.parametrize(
    ("kind", "notes"),
    [
        ("png grey 2", "2-bit grey scaled to 8 bits"),
        ("png grey 8", ""),
        ("png palette", ""),
        ("png palette with transparency", "alpha ignored"),
        ("png grey and alpha", "alpha ignored"),
        ("png one transparent grey", "alpha ignored"),
        ("bmp rgba", "alpha ignored"),
        ("npy rgb and alpha", "alpha ignored"),
        ("tiff rgb and alpha", "alpha ignored"),
        ("tiff grey and alpha", "alpha ignored"),
        ("tiff white is zero", "white is zero, inverted"),
        ("tiff thumbnails left out", "2 thumbnail or mask pages left out"),
        ("npz of several", "one of several arrays"),
    ],
)
def test_notes_say_what_was_done(put, kind, notes):
    assert scan(put(made(kind)[0]))[0].notes == notes


def test_an_animation_is_noted(put):
    second = [Image.fromarray(GREY[::-1].copy())]
    location = put(pil(GREY, "PNG", save_all=True, append_images=second))
    assert scan(location)[0].notes == "animation: first frame only"
    same(read_image(location), GREY)


def test_scanning_decodes_nothing(put, monkeypatch):
    locations = [put(data[0], kind) for kind in KINDS if (data := made(kind))]

    def decode(*_, **__):
        raise AssertionError("decoded")

    for page in (images.Page, *images.Page.__subclasses__()):
        monkeypatch.setattr(page, "rows", decode)
    for location in locations:
        assert scan(location, channel=0)
        with pytest.raises(UnreadableImage, match="decoded"):
            read_image(location, channel=0)


@pytest.mark.parametrize("page", [1, 7])
def test_a_page_that_is_not_there_is_named(put, page):
    with pytest.raises(UnreadableImage, match=f"it has 1 pages, so none of number {page}"):
        read_image(put(made("tiff u2")[0]), page)


def test_what_goes_wrong_inside_the_block_is_not_touched(put):
    with pytest.raises(KeyError, match="mine"), open_pages(put(made("tiff u2")[0])):
        raise KeyError("mine")


# Mapping ------------------------------------------------------------------------------------

MAPPED = [
    *(f"tiff {dtype}" for dtype in ("u1", "u2", "u4", "u8", "i1", "i2", "i4", "i8", "f2", "f4")),
    *("tiff f8", "tiff big-endian >u2", "tiff big-endian >f8", "tiff big", "tiff rgb"),
    *("tiff strips of one piece", "tiff multi-page", "tiff rgb plane by plane"),
    *("tiff rgb plane by plane, 3x3 pixels", "tiff rgb and alpha", "tiff hyperstack"),
    *(kind for kind in KINDS if kind.startswith("npy")),
]


def bases(array):
    while array is not None:
        yield array
        array = getattr(array, "base", None)


@pytest.mark.parametrize("kind", MAPPED)
def test_uncompressed_files_are_mapped(put, kind):
    data, expected = made(kind)
    location = put(data)
    for k in range(len(expected)):
        assert scan(location)[k].mapped
        assert scan(location)[k].in_strips
        with open_pages(location) as pages:
            pixels = pages[k].rows(1, 3)
        assert any(isinstance(base, np.memmap) for base in bases(pixels))
        assert not pixels.flags.writeable
        same(pixels, expected[k][1:3])  # still there when the file is closed


@pytest.mark.parametrize("kind", ["tiff u2", "npy f4", "tiff rgb plane by plane"])
def test_remote_files_are_not_mapped(remote, kind):
    assert not scan(remote(made(kind)[0]))[0].mapped


@pytest.mark.parametrize("kind", ["tiff lzw u1 strips", "tiff ?", "tiff white is zero", "png rgba"])
def test_what_has_to_be_decoded_is_not_mapped(put, kind):
    assert not scan(put(made(kind)[0]))[0].mapped


def sparse_npy(path, shape):
    with open(path, "wb") as stream:
        head = {"descr": "<f8", "fortran_order": False, "shape": shape}
        np.lib.format.write_array_header_1_0(stream, head)
        stream.truncate(stream.tell() + 8 * shape[0] * shape[1])


def sparse_tiff(path, shape):
    small = tif(np.zeros((2, shape[1])), bigtiff=True)
    start, _ = segment(small, 0)
    size = 8 * shape[0] * shape[1]
    path.write_bytes(edited(small, {257: shape[0], 278: shape[0], 279: size}))
    with open(path, "r+b") as stream:
        stream.truncate(start + size)


@pytest.mark.parametrize("write", [sparse_npy, sparse_tiff])
def test_mapped_images_may_be_larger_than_memory(tmp_path, write):
    shape = (65_536, 262_144)  # 128 GB
    write(tmp_path / "huge", shape)
    pixels = read_image(tmp_path / "huge")
    assert pixels.shape == shape
    assert pixels[-1, -1] == 0.0


# Bands of rows ------------------------------------------------------------------------------

IN_STRIPS = [kind for kind in KINDS if kind.startswith(("tiff", "npy"))]


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("place", ["put", "remote"])
def test_bands_are_rows_of_the_whole(request, kind, place):
    data, expected = made(kind)
    with open_pages(request.getfixturevalue(place)(data)) as pages:
        for page, whole in zip(pages, expected, strict=True):
            assert page.in_strips == (kind in IN_STRIPS and (place, kind[:3]) != ("remote", "npy"))
            bands = list(itertools.combinations(range(len(whole) + 1), 2))
            np.random.default_rng(0).shuffle(bands)
            for start, stop in bands:
                assert np.array_equal(page.rows(start, stop), whole[start:stop]), (start, stop)


@pytest.mark.parametrize("kind", ["tiff lzw u1 strips", "tiff tiles", "tiff jpeg tiles"])
def test_a_band_decodes_only_what_it_needs(put, kind, monkeypatch):
    data, _ = made(kind)
    decoded = []
    with open_pages(put(data)) as [page]:
        original = type(page)._segment
        monkeypatch.setattr(
            type(page),
            "_segment",
            lambda self, index: decoded.append(index) or original(self, index),
        )
        page.rows(17, 19)
        page.rows(18, 19)
    assert decoded == ([4] if "strips" in kind else [2, 3])


# Colours and channels -----------------------------------------------------------------------


@pytest.mark.parametrize("dtype", ["u1", "u2"])
def test_luminance_is_that_of_the_standard(put, dtype):
    # ITU-R BT.709-6 (2015), item 3.2: E'_Y = 0.2126 E'_R + 0.7152 E'_G + 0.0722 E'_B
    pixels = noise(dtype, ROWS, COLS, 3)
    weights = [Fraction(2126, 10_000), Fraction(7152, 10_000), Fraction(722, 10_000)]
    expected = [
        float(sum(weight * int(value) for weight, value in zip(weights, pixel, strict=True)))
        for pixel in pixels.reshape(-1, 3)
    ]
    expected = np.array(expected).reshape(ROWS, COLS).astype(np.float32)
    for data in (imagecodecs.png_encode(pixels), tif(pixels, photometric="rgb"), npy(pixels)):
        same(read_image(put(data)), expected)


@pytest.mark.parametrize(
    ("dtype", "result", "tolerance"),
    [
        ("?", "f4", 1e-7),
        ("i1", "f4", 1e-7),
        ("i2", "f4", 1e-7),
        ("u4", "f8", 1e-15),
        ("i8", "f8", 1e-15),
        ("f2", "f4", 1e-7),
        (">f4", None, 1e-7),
        ("f8", "f8", 1e-15),
    ],
)
def test_luminance_of_other_types(put, dtype, result, tolerance):
    pixels = noise(dtype, ROWS, COLS, 3)
    weights = np.array([0.2126, 0.7152, 0.0722], dtype=np.longdouble)
    expected = pixels.astype(np.longdouble) @ weights
    got = read_image(put(npy(pixels)))
    size = np.abs(pixels.astype(np.longdouble)) @ weights
    assert (np.abs(got - expected) <= 2 * tolerance * size).all()
    if result is not None:
        assert got.dtype == result


@pytest.mark.parametrize("dtype", ["?", "u1", "u2", "i2", "u4", "i4", "f2", "f4", "f8", ">f4"])
def test_a_grey_stored_as_colour_keeps_its_value_exactly(put, dtype):
    grey = noise(dtype)
    location = put(npy(np.stack([grey] * 3, axis=2)))
    np.testing.assert_array_equal(read_image(location), grey)


def test_luminance_of_the_largest_values_is_finite(put):
    largest = np.full((2, 2, 3), np.finfo("f2").max, dtype="f2")
    assert (read_image(put(npy(largest))) == largest[..., 0]).all()
    largest = np.full((2, 2, 3), np.finfo("f4").max, dtype="f4")
    assert (read_image(put(npy(largest))) == largest[..., 0]).all()


def test_a_missing_part_of_a_colour_is_a_missing_pixel(put):
    pixels = noise("f4", ROWS, COLS, 3)
    pixels[2, 3, 1] = pixels[4, 5, 0] = np.nan
    missing = np.isnan(read_image(put(npy(pixels))))
    assert np.argwhere(missing).tolist() == [[2, 3], [4, 5]]


def test_an_infinite_part_of_a_colour_stays_infinite(put):
    pixels = noise("f4", ROWS, COLS, 3)
    pixels[2, 3, 0] = pixels[4, 5] = np.inf
    pixels[6, 7, 2] = -np.inf
    for dtype in ("f4", "f8"):
        got = read_image(put(npy(pixels.astype(dtype))))
        assert np.argwhere(np.isinf(got)).tolist() == [[2, 3], [4, 5], [6, 7]]
        assert not np.isnan(got).any()


@pytest.mark.parametrize("channel", ["red", "green", "blue"])
def test_grey_has_no_named_channel(put, channel):
    for kind in ("png grey 8", "tiff grey and alpha", "npy f4"):
        location = put(made(kind)[0])
        for read in (read_image, scan):
            with pytest.raises(UnreadableImage, match=f"a grey image has no channel '{channel}'"):
                read(location, channel=channel)


@pytest.mark.parametrize(("kind", "samples"), [("png grey 8", 1), ("png rgba", 4), ("npy rgb", 3)])
def test_a_channel_that_is_not_there_is_named(put, kind, samples):
    for read in (read_image, scan):
        with pytest.raises(UnreadableImage, match=f"has {samples} channels, so none of number 4"):
            read(put(made(kind)[0]), channel=4)


@pytest.mark.parametrize("channel", ["grey", "Red", "", None, 1.0, True])
def test_unknown_channels_are_refused(put, channel):
    with pytest.raises(ValueError, match="channel must be one of 'luminance', 'red'"):
        read_image(put(made("png rgb 8")[0]), channel=channel)


def test_samples_of_unknown_meaning_are_chosen_by_number(put):
    pixels = noise("u1", ROWS, COLS, 5)
    location = put(tif(pixels, planarconfig="contig", photometric="minisblack"))
    with pytest.raises(UnreadableImage, match="5 samples a pixel of unknown meaning; choose"):
        read_image(location)
    for k in range(5):
        same(read_image(location, channel=k), pixels[..., k])


def test_samples_beside_colours_are_left_out_with_a_note(put):
    pixels = noise("u1", ROWS, COLS, 5)
    colours = read_image(put(tif(pixels[..., :3], planarconfig="contig", photometric="rgb")))
    location = put(tif(pixels, planarconfig="contig", photometric="rgb"))
    same(read_image(location), colours)
    assert scan(location)[0].notes == "2 samples beside the colours ignored"
    same(read_image(location, channel=4), pixels[..., 4])


def test_an_orientation_that_is_not_applied_is_noted(put):
    exif = Image.Exif()
    exif[274] = 6  # EXIF 2.32, 4.6.4, tag Orientation: turned by 90 degrees
    location = put(pil(ramp(), "JPEG", exif=exif))
    assert read_image(location).shape == (ROWS, COLS)
    assert scan(location)[0].notes == "orientation tag not applied"
    turned = put(tif(ramp(), extratags=[(274, 3, 1, 8, True)]))
    assert scan(turned)[0].notes == "orientation tag not applied"
    same(read_image(turned), ramp())
    upright = put(tif(ramp(), extratags=[(274, 3, 1, 1, True)]))
    assert scan(upright)[0].notes == ""


def test_the_no_data_value_that_a_raster_declares_is_missing(put):
    pixels = noise("f4")
    pixels[3, 4] = -9999
    pixels[5, 6] = 7
    for compression in (None, "zlib"):
        location = put(
            tif(pixels, compression=compression, extratags=[(42113, 2, 0, "-9999", True)])
        )
        found = read_image(location)
        assert np.argwhere(found.mask).tolist() == [[3, 4]]
        assert np.argwhere(read_image(location, missing_value=7).mask).tolist() == [[3, 4], [5, 6]]
        assert scan(location)[0].notes == "declares -9999 to be missing"
    for text in ("nan", "none"):  # NaN is missing anyway; what is no number says nothing
        location = put(tif(pixels, extratags=[(42113, 2, 0, text, True)]))
        assert not isinstance(read_image(location), np.ma.MaskedArray)


@pytest.mark.parametrize("kind", ["PNG", "BMP", "TIFF"])
def test_palettes_read_as_labels_are_their_entries(put, kind):
    entries = noise("u1", below=5)
    picture = Image.new("P", (COLS, ROWS))
    picture.putdata(entries.ravel().tolist())
    picture.putpalette([7, 8, 9, 200, 10, 30, 0, 0, 0, 90, 90, 90, 1, 2, 3])
    with open_pages(put(pil(picture, kind))) as [page]:
        assert page.colour
        labels = page.as_labels()
        assert labels.samples == 1
        same(labels.rows(0, ROWS), entries)


@pytest.mark.parametrize("depth", [1, 2, 4, 8])
def test_greys_of_few_bits_read_as_labels_are_not_scaled(put, depth):
    entries = noise("u1", below=2**depth)
    with open_pages(put(png(entries, 0, depth))) as [page]:
        same(page.as_labels().rows(0, ROWS), entries)


def test_a_tiff_without_a_colour_model_is_not_inverted(put):
    written = bytearray(tif(ramp()))
    at = written.index(struct.pack("<HHI", 262, 3, 1))
    written[at : at + 2] = struct.pack("<H", 261)  # another tag in its place, still in order
    same(read_image(put(bytes(written))), ramp())


@pytest.mark.parametrize("side", [2, 3, 5])
@pytest.mark.parametrize("compression", [None, "zlib"])
def test_planes_are_told_from_rows_whatever_their_number(put, side, compression):
    pixels = noise("u2", side, side, side)  # as many planes as rows and columns
    location = put(tif(pixels, planarconfig="separate", compression=compression))
    for k in range(side):
        same(read_image(location, channel=k), pixels[k])


# Missing values -----------------------------------------------------------------------------


def test_pixels_of_the_missing_value_are_masked(put):
    pixels = noise("f4")
    pixels[2, 3] = pixels[7, 1] = -9999.0
    pixels[0, 0] = np.nan
    for data in (npy(pixels), tif(pixels, compression="zlib")):
        got = read_image(put(data), missing_value=-9999)
        assert np.argwhere(got.mask).tolist() == [[2, 3], [7, 1]]
        same(got.data, pixels)
        assert not np.ma.isMaskedArray(read_image(put(data)))


def test_a_missing_value_is_rounded_like_the_pixels(put):
    pixels = np.full((2, 2), 0.1, dtype=np.float32)
    assert read_image(put(npy(pixels)), missing_value=0.1).mask.all()


@pytest.mark.parametrize("dtype", ["u1", "i8", "f2", "f4", "?"])
@pytest.mark.parametrize("value", [-1e308, 1e300, 300.5])
def test_a_missing_value_outside_a_type_is_never_met(put, dtype, value):
    pixels = noise(dtype)
    if pixels.dtype.kind == "f":
        pixels[1, 1] = np.inf * np.sign(value)
    assert not read_image(put(npy(pixels)), missing_value=value).mask.any()


def test_a_missing_value_counts_after_the_colours_are_mixed(put):
    pixels = np.zeros((2, 2, 3), dtype=np.uint8)
    pixels[0, 0] = 255
    assert read_image(put(pil(pixels, "PNG")), missing_value=255).mask.tolist() == [
        *([True, False], [False, False])
    ]


# Damaged files ------------------------------------------------------------------------------

STRIPS = tif(ramp(), compression="zlib", rowsperstrip=4)
LZW = tif(ramp(), compression="lzw", rowsperstrip=4)
PLAIN = tif(ramp(), rowsperstrip=4)
TILES = tif(ramp(), compression="zlib", tile=(16, 16))
STACK = tif(noise("u1", 3, ROWS, COLS))
RGB = tif(COLOUR, photometric="rgb")
INDEXED = tif(GREY, photometric="palette", colormap=MAP)
TRNS = (b"tRNS", struct.pack(">H", 5))


def bomb_npz():
    """A small archive that promises a huge array."""
    stream = io.BytesIO()
    head = {"descr": "<f8", "fortran_order": False, "shape": (1_000_000, 1_000_000)}
    np.lib.format.write_array_header_1_0(stream, head)
    return zipped(a_npy=stream.getvalue() + bytes(100_000))


def encrypted_npz():
    data = npz(a=GREY)
    central = data.index(b"PK\x01\x02")
    return changed(changed(data, 6, b"\x01"), central + 8, b"\x01")


def long_header_npy():
    return b"\x93NUMPY\x02\x00" + struct.pack("<I", 2**32 - 1) + npy(GREY)[10:]


SOF = b"\xff\xc0\x00\x0b\x08"  # before rows and columns in a grey baseline JPEG

DAMAGED = {
    "nothing": (lambda: b"", "empty file"),
    "one byte": (lambda: b"P", "not an image: it starts with b'P'"),
    "text": (lambda: b"row,col,height\n1,2,3\n", "not an image.*PNG, JPEG, BMP, TIFF, NPY and NPZ"),
    "another format": (lambda: pil(GREY, "GIF"), "not an image: it starts with b'GIF"),
    "zeros": (lambda: bytes(4096), "not an image"),
    "png cut in its head": (lambda: pil(GREY, "PNG")[:20], "truncated or damaged PNG"),
    "png cut in its pixels": (lambda: pil(GREY, "PNG")[:300], "damaged"),
    "png with a wrong checksum": (lambda: changed(pil(GREY, "PNG"), 300, b"\0\1"), "damaged"),
    "png without its palette": (lambda: png(GREY, 3, 8), "damaged"),
    "png of no known colours": (lambda: png(GREY, 5, 8), "colour type 5"),
    "png without columns": (lambda: png(GREY[:, :0], 0, 8), "19x0 pixels"),
    "png bomb": (lambda: png(GREY, 0, 8, size=(2**31 - 1, 2**31 - 1)), "too large: 46116860"),
    "png with fewer rows than promised": (lambda: png(GREY, 0, 8, size=(99, COLS)), "damaged"),
    "png whose transparency is damaged": (
        lambda: png(COLOUR, 2, 8, (b"tRNS", bytes(6))).replace(b"tRNS\0", b"tRNS\1"),
        "promises 19x23x4.*decoded.*19x23x3",
    ),
    "jpeg cut in its head": (lambda: pil(GREY, "JPEG")[:100], "damaged JPEG header"),
    "jpeg cut in its pixels": (lambda: pil(GREY, "JPEG")[:-100], "truncated"),
    "jpeg bomb": (
        lambda: (data := pil(ramp(), "JPEG")).replace(SOF + data[data.index(SOF) + 5 :][:4],
                                                      SOF + b"\xff\xff\xff\xff"),
        "too large: 4294836225 pixels of an image of 65535x65535",
    ),
    "jpeg for print": (lambda: pil(Image.new("CMYK", (9, 9)), "JPEG"),
                       "JPEG with colour model CMYK; grey, RGB and palette images are read"),
    "jpeg of 1x1 pixels": (lambda: pil(GREY[:1, :1], "JPEG"), "image of 1x1 pixels; at least 2x2"),
    "bmp cut in its head": (lambda: pil(GREY, "BMP")[:30], "damaged BMP header"),
    "bmp cut in its pixels": (lambda: pil(GREY, "BMP")[:-100], "truncated"),
    "bmp bomb": (lambda: changed(pil(GREY, "BMP"), 18, struct.pack("<ii", 2**30, 2**30)),
                 "too large: 1152921504606846976 pixels"),
    "bmp of 8 bits with two greys": (
        lambda: bmp([row.tobytes() for row in MASKS], COLS, 8, [(0, 0, 0), (255, 255, 255)]),
        "BMP of 8 bits a pixel with a palette of black and white",
    ),
    "tiff cut in its head": (lambda: PLAIN[:6], "damaged TIFF"),
    "tiff cut in its directory": (lambda: PLAIN[:60], "TIFF"),
    "tiff cut in its pixels": (lambda: PLAIN[:-100], "truncated TIFF: pixels reach to byte"),
    "tiff cut, in one piece": (lambda: tif(GREY)[:-1], "truncated TIFF: pixels reach to byte"),
    "tiff that promises more than it has": (
        lambda: edited(tif(GREY), {257: 1000, 278: 1000}), "page 0"),
    "tiff without a directory": (lambda: b"II*\0" + bytes(60), "no image directory"),
    "tiff whose directories break off": (lambda: chained(STACK, 1, 1_000_000),
                                         "the chain of directories breaks off after 2 pages"),
    "tiff whose next directory is pixels": (lambda: chained(STACK, 0, directory(STACK, 0) + 400),
                                            "the chain of directories breaks off after"),
    "tiff cut between its pages": (lambda: STACK[: directory(STACK, 1) + 5], "TIFF"),
    "tiff of endless directories": (lambda: chained(STACK, 2, directory(STACK, 0)),
                                    "the chain of directories breaks off"),
    "tiff directory that follows itself": (lambda: chained(STACK, 1, directory(STACK, 1)),
                                           "the chain of directories breaks off"),
    "tiff that points beyond its end": (lambda: edited(STRIPS, {(273, 2): 10_000_000}),
                                        "truncated TIFF: pixels reach to byte 100000"),
    "tiff with a strip at 0": (lambda: edited(STRIPS, {(273, 2): 0}),
                               "without the pixels of page 0, strip 2"),
    "tiff with a strip of no bytes": (lambda: edited(STRIPS, {(279, 2): 0}),
                                      "without the pixels of page 0, strip 2"),
    "tiff with a tile of no bytes": (lambda: edited(TILES, {(325, 3): 0}),
                                     "without the pixels of page 0, tile 3"),
    "tiff with too few strips": (
        lambda: edited(STRIPS, {(273, "count"): 3, (279, "count"): 3}),
        "damaged TIFF: 3 of 5 strips",
    ),
    "tiff with too few uncompressed strips": (
        lambda: edited(PLAIN, {(273, "count"): 1, (279, "count"): 1}), "damaged TIFF: "),
    "tiff with too few tiles": (lambda: edited(TILES, {(324, "count"): 3, (325, "count"): 3}),
                                "damaged TIFF: 3 of 4 strips or tiles"),
    "tiff without offsets": (lambda: edited(STRIPS, {(273, "code"): 60_000}), "no pixels"),
    "tiff with a damaged zlib strip": (
        lambda: changed(STRIPS, segment(STRIPS, 1)[0] + 9, b"\x55\x55"), "at page 0, strip 1"),
    "tiff with a damaged zlib checksum": (
        lambda: changed(STRIPS, segment(STRIPS, 1)[1] - 1, b"\x55"), "at page 0, strip 1"),
    "tiff with a damaged lzw strip": (
        lambda: changed(LZW, segment(LZW, 1)[0] + 9, b"\xff" * 9), "at page 0, strip 1"),
    "tiff with a short lzw strip": (lambda: edited(LZW, {(279, 1): 20}), "at page 0, strip 1"),
    "tiff with a short zlib strip": (lambda: edited(STRIPS, {(279, 1): 20}), "at page 0, strip 1"),
    "tiff with strips of no rows": (lambda: edited(STRIPS, {278: 0}), "damaged TIFF: strips or"),
    "tiff with tiles of no rows": (lambda: edited(TILES, {323: 0}), "damaged TIFF: strips or"),
    "tiff bomb": (lambda: edited(tif(ramp(), compression="zlib"),
                                 {256: 100_000, 257: 100_000, 278: 100_000}),
                  "too large: 10000000000 pixels of an image of 100000x100000"),
    "tiff bomb of one tile": (
        lambda: edited(tif(ramp(), compression="zlib", tile=(32, 32)), {322: 65_520, 323: 65_520}),
        "too large: 4292870400 pixels",
    ),
    "tiff bomb of many samples": (
        lambda: edited(tif(noise("f8", 90, 90), compression="zlib"), {277: 65_535}),
        "65535 samples|too large"),
    "tiff of complex numbers": (lambda: tif(GREY * 1j), "of type complex128; bool, integers and"),
    "tiff of print colours": (
        lambda: tif(with_alpha("u1", 4), photometric="separated"), "TIFF with colour model"),
    "tiff of video colours": (lambda: edited(RGB, {262: 6}), "TIFF with colour model"),
    "tiff of voxels": (
        lambda: tif(noise("u1", 32, 32, 32), volumetric=True, tile=(16, 16, 16)),
        "such pixels cannot be read",
    ),
    "tiff of colours with one sample": (lambda: edited(RGB, {277: 1}),
                                        "colours of 1 sample|planes behind"),
    "tiff without its palette": (lambda: edited(INDEXED, {(320, "code"): 60_000}),
                                 "a palette of 0 colours"),
    "tiff with a short palette": (lambda: edited(INDEXED, {(320, "count"): 30}),
                                  "a palette of 10 colours"),
    "tiff of signed numbers whose zero is white": (
        lambda: tif(noise("i2"), photometric="miniswhite"), "only unsigned integers"),
    "tiff of thumbnails": (lambda: tif(GREY, subfiletype=1), "thumbnails or masks only"),
    "tiff with one directory for many planes": (
        lambda: tif(noise("u1", 5, ROWS, COLS), truncate=True), "5 planes behind 1 directory"),
    "tiff hyperstack with one directory": (
        lambda: tif(noise("u1", 5, ROWS, COLS), photometric=None, imagej=True, truncate=True),
        "5 planes behind 1 directory",
    ),
    "tiff stack with one directory": (  # tags as tifffile reads them: count of 33629 is the planes
        lambda: tif(
            GREY, extratags=[(33628, 4, 4, (0,) * 4, True), (33629, 5, 5, (1,) * 10, True)]
        ),
        "5 planes behind 1 directory",
    ),
    "tiff with pages of 1x1 pixels": (lambda: pil(
        Image.new("L", (1, 1)), "TIFF", save_all=True, append_images=[Image.new("L", (9, 9))]),
        "page 0: image of 1x1 pixels"),
    "npy cut in its head": (lambda: npy(GREY)[:30], "damaged NPY header"),
    "npy cut in its pixels": (lambda: npy(GREY)[:-1], "truncated NPY: 436 of 437 bytes of pixels"),
    "npy of an unknown version": (lambda: changed(npy(GREY), 6, b"\x09"),
                                  "damaged NPY header: version"),
    "npy with a head that is no dict": (lambda: npy(GREY).replace(b"{'descr'", b"[[descr["),
                                        "damaged"),
    "npy with a head of 4 GB": (long_header_npy, "damaged NPY header"),
    "npy of objects": (lambda: npy(np.full((ROWS, COLS), None)), "pixels of type object"),
    "npy of records": (lambda: npy(np.zeros((9, 9), dtype="u1,f4")), "pixels of type"),
    "npy of text": (lambda: npy(np.full((9, 9), "a")), "pixels of type <U1"),
    "npy of dates": (lambda: npy(np.zeros((9, 9), "M8[s]")), "pixels of type datetime64"),
    "npy of complex numbers": (lambda: npy(GREY * 1j), "pixels of type complex128"),
    "npy of one dimension": (lambda: npy(GREY[0]), r"array of shape \(23,\); an image is \(rows,"),
    "npy of a stack": (lambda: npy(noise("u1", 5, 9, 9)), r"\(5, 9, 9\).*Save one image a file"),
    "npy of no dimension": (lambda: npy(np.float64(3)), r"array of shape \(\)"),
    "npy of no rows": (lambda: npy(np.zeros((0, 9))), "image of 0x9 pixels"),
    "npy of negative rows": (lambda: npy(GREY).replace(b"(19, 23)", b"(-9, 23)"), "image of -9x23"),
    "npy of one row": (lambda: npy(GREY[:1]), "image of 1x23 pixels; at least 2x2 are needed"),
    "npz of nothing": (lambda: zipped(), "NPZ without an array"),
    "npz with a foreign member": (lambda: zipped(a_npy=npy(GREY), notes_txt="hello"),
                                  "zip archive with 'notes.txt'"),
    "npz cut in its pixels": (lambda: npz(a=GREY)[:200], "damaged"),
    "npz cut in its list": (lambda: npz(a=GREY)[:-10], "damaged"),
    "npz with a wrong checksum": (lambda: changed(npz(a=GREY), 300, b"\x00\x01"), "CRC"),
    "npz of short arrays": (lambda: zipped(a_npy=npy(GREY)[:-9]), "expected 437 bytes got 428"),
    "npz of objects": (lambda: zipped(a_npy=npy(np.full((9, 9), None))), "pixels of type object"),
    "npz bomb": (bomb_npz, "too large: 1000000000000 pixels"),
    "npz with a password": (encrypted_npz, "encrypted"),
    "npz of a stack": (lambda: npz(a=noise("u1", 5, 9, 9)), "array of shape"),
    "npz with one bad array": (lambda: npz(a=GREY, b=GREY * 1j), "page 1: pixels of type complex"),
}  # fmt: skip


@pytest.mark.parametrize("kind", DAMAGED)
@pytest.mark.parametrize("place", ["put", "remote"])
def test_damaged_files_are_refused_with_the_reason(request, kind, place):
    make, reason = DAMAGED[kind]
    location = request.getfixturevalue(place)(make())
    with pytest.raises(UnreadableImage, match=reason) as caught:
        read_image(location)
    assert str(caught.value).strip()
    assert "\n" not in str(caught.value)
    assert outcome(location) is None


def test_damaged_kinds_are_many():
    assert len(DAMAGED) >= 20


def test_a_folder_a_missing_file_and_an_unknown_protocol_are_refused(tmp_path, remote):
    remote(b"")
    for location, reason in [
        (tmp_path, "it is a folder"),
        (tmp_path / "none.png", "there is no such file"),
        (tmp_path / "none" / "none.png", "there is no such file"),
        ("memory://images/none.png", "there is no such file"),
        ("nosuch://images/a.png", "nosuch://images/a.png cannot be reached"),
    ]:
        for read in (read_image, lambda location: scan(str(location))):
            with pytest.raises(UnreadableImage, match=reason):
                read(location)


def test_a_colour_png_with_needless_transparency_is_read_without_it(put):
    # W3C PNG specification, third edition, section 11.3.1.1: tRNS is not allowed with an alpha
    # channel; libpng leaves it out
    for colour_type, samples in ((4, 2), (6, 4)):
        pixels = with_alpha("u1", samples)
        location = put(png(pixels, colour_type, 8, TRNS))
        assert scan(location)[0].notes == "alpha ignored"
        assert read_image(location).shape == (ROWS, COLS)
        for k in range(samples):
            same(read_image(location, channel=k), pixels[..., k])
        with pytest.raises(UnreadableImage, match=f"it has {samples} channels"):
            read_image(location, channel=samples)


def test_one_bad_page_is_named_and_spoils_the_file(put):
    stream = io.BytesIO()
    with tifffile.TiffWriter(stream) as writer:
        writer.write(GREY, photometric="minisblack")
        writer.write(GREY * 1j, photometric="minisblack")
    with pytest.raises(UnreadableImage, match="page 1: pixels of type complex128"):
        read_image(put(stream.getvalue()), 0)


@pytest.mark.parametrize(
    ("error", "reason"),
    [
        (PermissionError(13, "Permission denied"), "Permission denied"),
        (RuntimeError("two\nlines"), "damaged: two lines"),
        (ZeroDivisionError(), "damaged: ZeroDivisionError"),
        (RecursionError("deep"), "damaged: deep"),
        (UnreadableImage("already said"), "^already said$"),
    ],
)
def test_whatever_a_decoder_raises_becomes_one_line(error, reason):
    with pytest.raises(UnreadableImage, match=reason), images.reading():
        raise error


@pytest.mark.parametrize("error", [MemoryError(), OSError(errno.EMFILE, "Too many open files")])
def test_a_fault_of_the_machine_is_no_damage(error):
    expected = pytest.raises(OutOfResources, match=r"out of memory|Too many open files")
    with expected, images.reading():
        raise error


@pytest.mark.parametrize("error", [KeyboardInterrupt, SystemExit])
def test_an_interruption_is_no_damage(error):
    with pytest.raises(error), images.reading():
        raise error


# Nothing but a refusal, whatever is in the file ---------------------------------------------

FUZZED = [
    *("png grey 8", "png palette with transparency", "png one transparent colour"),
    *("png interlaced rgb 16", "jpeg grey", "jpeg progressive", "bmp 1"),
    *("bmp palette of 256", "bmp rgba", "tiff u2", "tiff tiles", "tiff rgb plane by plane"),
    *("tiff lzw with predictor u1", "tiff zlib u2 strips", "tiff zstd f4 strips"),
    *("tiff packbits u1 strips", "tiff jpeg tiles", "tiff jpeg with shared tables", "npz"),
    *("tiff multi-page", "tiff big, big-endian, strips", "tiff palette lzw"),
    *("tiff 12 bits packed", "tiff fax", "npy f4", "npy version 3", "npz of several"),
]


def read_all(location):
    """Every sample of every page, and the grey values where they are defined."""
    found = []
    with open_pages(location, max_pixels=100_000) as pages:
        for page in pages:
            for channel in ("luminance", *range(min(page.samples, 5))):
                pixels = grey_rows(page, 0, page.shape[0], channel)
                assert pixels.shape == page.shape
                found.append(pixels.copy())
    return found


def outcome(location):
    """What was read, or None where it was refused."""
    try:
        return read_all(location)
    except UnreadableImage:
        return None


@pytest.mark.parametrize("kind", FUZZED)
def test_random_damage_is_refused_or_gives_the_promised_shape(put, kind):
    data, _ = made(kind)
    rng = np.random.default_rng(len(data))
    refused = 0
    for trial in range(200):
        damaged = bytearray(data)
        head = len(data) if trial % 2 else min(300, len(data))  # headers are the brittle part
        for at in rng.integers(0, head, rng.integers(1, 4)):
            value = damaged[at]
            damaged[at] = (rng.integers(256), 0, 255, value ^ 1, value ^ 128)[rng.integers(5)]
        if trial % 8 == 7:
            damaged = damaged[: rng.integers(len(data))]
        refused += outcome(put(damaged)) is None
    assert refused > 0


@pytest.mark.parametrize("kind", FUZZED)
def test_a_file_cut_anywhere_is_refused_or_complete(put, kind):
    data, _ = made(kind)
    whole = read_all(put(data))
    stops = np.unique([*np.linspace(0, len(data), 50, False, dtype=int), len(data) - 1])
    refused = 0
    for stop in stops:
        found = outcome(put(data[:stop]))
        if found is None:
            refused += 1
            continue
        assert stop > len(data) - 20  # an end mark or padding
        for got, expected in zip(found, whole, strict=True):
            np.testing.assert_array_equal(got, expected)
    assert refused >= 45


CHECKED = {
    "png": lambda: png(GREY[:5, :6], 0, 8),
    "png with transparency": lambda: png(COLOUR[:5, :6], 2, 8, (b"tRNS", bytes(6))),
    "npz": lambda: npz(a=GREY[:5, :6]),
    "npz compressed": lambda: npz(True, a=GREY[:5, :6]),
}


@pytest.mark.parametrize("kind", CHECKED)
def test_with_checksums_no_byte_can_change_a_pixel(put, kind):
    data = CHECKED[kind]()
    whole = read_all(put(data))
    refused = 0
    for at in range(len(data)):
        found = outcome(put(changed(data, at, bytes([data[at] ^ 0x81]))))
        if found is None:
            refused += 1
            continue
        for got, expected in zip(found, whole, strict=True):
            np.testing.assert_array_equal(got, expected)
    assert refused > len(data) / 2


# Limits -------------------------------------------------------------------------------------


def peak_of(action):
    """Largest memory in bytes that an action takes."""
    tracemalloc.start(1)
    try:
        action()
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


GREEDY = [
    *(kind for kind in DAMAGED if "bomb" in kind),
    *("npy with a head of 4 GB", "tiff that promises more than it has", "npy cut in its pixels"),
]


@pytest.mark.parametrize("kind", GREEDY)
def test_a_refusal_takes_little_memory(put, kind):
    location = put(DAMAGED[kind][0]())
    assert peak_of(lambda: outcome(location)) < 16e6


@pytest.mark.parametrize("tag", [258, 270, 273, 277, 279, 305, 320])
def test_a_huge_count_in_a_directory_takes_little_memory(put, tag):
    location = put(edited(INDEXED, {(tag, "count"): 2**32 - 1}))
    assert peak_of(lambda: outcome(location)) < 16e6


def test_memory_is_measured():
    assert peak_of(lambda: np.ones(20_000_000, dtype=np.uint8)) > 16e6


@pytest.mark.parametrize(
    ("kind", "piece"),
    [
        ("png grey 8", ROWS * COLS),
        ("png interlaced rgb 16", ROWS * COLS),
        ("jpeg rgb", ROWS * COLS),
        ("bmp rgb", ROWS * COLS),
        ("npz", ROWS * COLS),
        ("tiff lzw u1 strips", 4 * COLS),
        ("tiff rgb plane by plane, strips", 4 * COLS),
        ("tiff jpeg grey", 16 * COLS),
        ("tiff tiles", 16 * COLS),
        ("tiff one tile", 32 * 32),
        ("tiff palette", ROWS * COLS),
        ("tiff big, big-endian, strips", 4 * COLS),
    ],
)
def test_what_is_decoded_at_once_is_limited(put, kind, piece):
    location = put(made(kind)[0])
    assert scan(location, piece)
    assert read_image(location, max_pixels=piece).shape == (ROWS, COLS)
    for read in (scan, lambda location, limit: read_image(location, max_pixels=limit)):
        with pytest.raises(
            UnreadableImage,
            match=f"too large: {piece} pixels of an image of {ROWS}x{COLS} have to be decoded at "
            f"once, the limit max_pixels is {piece - 1}",
        ):
            read(location, piece - 1)


def test_mapped_images_have_no_limit_and_remote_ones_do(put, remote):
    for kind in ("npy f4", "npy Fortran order", "tiff u2", "tiff rgb plane by plane"):
        data, [expected] = made(kind)
        same(read_image(put(data), max_pixels=1, channel=0), np.atleast_3d(expected)[..., 0])
        with pytest.raises(UnreadableImage, match="too large"):
            read_image(remote(data), max_pixels=1)


def test_a_large_image_in_small_strips_is_read_in_bands(put):
    pixels = noise("u1", 1000, 301)
    for options, tall in (({"rowsperstrip": 8}, 8), ({"tile": (16, 16)}, 16)):
        location = put(tif(pixels, compression="zlib", **options))
        with open_pages(location, max_pixels=tall * 301) as [page]:
            bands = [page.rows(top, top + 10) for top in range(0, 1000, 10)]
        same(np.concatenate(bands), pixels)


def test_the_limit_of_another_library_does_not_stand_beside_ours(put, monkeypatch):
    monkeypatch.setattr(Image, "MAX_IMAGE_PIXELS", 10)
    for kind in ("jpeg grey", "bmp rgb", "bmp palette of 256"):
        data, [expected] = made(kind)
        with pytest.raises(Image.DecompressionBombError):
            Image.open(io.BytesIO(data))
        same(read_image(put(data), channel=0), np.atleast_3d(expected)[..., 0])


# Files are closed ---------------------------------------------------------------------------


def watched(monkeypatch):
    """Collect the files that are opened."""
    opened, original = [], locations.open_input

    def open_input(location):
        opened.append(original(location))
        return opened[-1]

    monkeypatch.setattr(locations, "open_input", open_input)
    return opened


def warnings_of(action):
    """What is warned of during an action, files that are left open included."""
    with warnings.catch_warnings(record=True) as seen:
        warnings.simplefilter("always")
        action()
        gc.collect()
    return [str(warning.message) for warning in seen]


def test_files_are_closed_after_reading(put, monkeypatch):
    locations = [put(made(kind)[0], f"good {kind}") for kind in KINDS]
    opened = watched(monkeypatch)

    def read():
        for location in locations:
            scan(location, channel=0)
            read_image(location, channel=0)

    assert warnings_of(read) == []
    assert len(opened) == 2 * len(KINDS)
    assert [stream.name for stream in opened if not stream.closed] == []


def test_files_are_closed_after_a_refusal(put, monkeypatch):
    locations = [put(DAMAGED[kind][0](), f"damaged {kind}") for kind in DAMAGED]
    opened = watched(monkeypatch)
    assert warnings_of(lambda: [outcome(location) for location in locations]) == []
    assert len(opened) == len(DAMAGED)
    assert [stream.name for stream in opened if not stream.closed] == []


def test_an_open_file_would_be_noticed(put):
    location = put(b"", "left open")
    [message] = warnings_of(lambda: locations.open_input(location) and None)
    assert "unclosed file" in message
    assert "left open" in message
