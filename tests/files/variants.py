"""The matrix of file kinds: what each stores, who wrote it, and the pixels that must come out.

Writers are tifffile, libtiff (through imagecodecs), Pillow, libpng, libjpeg and, where none of them has the
kind, bytes put together here as the specification says.  ``expected`` is what went in, or None where a codec
loses something and an independent decoder is asked instead.
"""

from __future__ import annotations

import io
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import partial
from typing import Any

import imagecodecs
import numpy as np
import tifffile
from PIL import Image

from tests.files import made_profiles, png_writer, tiff_writer

HEIGHT, WIDTH = 45, 67
Array = np.ndarray


@dataclass(frozen=True)
class Variant:
    """One kind of file."""

    name: str
    suffix: str
    make: Callable[[], bytes]
    expected: Array | None = None
    alpha: Array | None = None
    fate: str = "kept"  # kept, converted, refused
    flags: tuple[str, ...] = ()
    facts: dict[str, Any] = field(default_factory=dict)


def picture(bits: int = 8, channels: int = 3, seed: int = 1) -> Array:
    """Return an integer picture that uses its whole range: ramps, noise, and both ends."""
    rng = np.random.default_rng(seed)
    y, x = np.mgrid[0:HEIGHT, 0:WIDTH]
    ramps = [x / (WIDTH - 1), y / (HEIGHT - 1), (x + y) / (HEIGHT + WIDTH - 2), 1 - x / (WIDTH - 1)]
    light = np.stack(ramps[:channels], axis=-1) + rng.normal(0, 0.05, (HEIGHT, WIDTH, channels))
    top = 2**bits - 1
    values = np.round(np.clip(light, 0, 1) * top)
    return values.astype(np.uint8 if bits <= 8 else np.uint16 if bits <= 16 else np.uint32)


def smooth(channels: int = 3) -> Array:
    """Return an 8-bit picture without noise, for codecs that lose some."""
    y, x = np.mgrid[0:HEIGHT, 0:WIDTH]
    waves = [
        np.sin(x / 9) * 0.4 + 0.5,
        np.cos(y / 7) * 0.4 + 0.5,
        np.sin((x + y) / 11) * 0.4 + 0.5,
        x / WIDTH,
    ]
    return np.round(np.stack(waves[:channels], axis=-1) * 255).astype(np.uint8)


def alpha_of(colours: Array) -> Array:
    """Return an alpha that leaves room for associated colours: from nothing to all, in steps."""
    top = 1.0 if colours.dtype.kind == "f" else np.iinfo(colours.dtype).max
    ramp = np.linspace(0, 1, WIDTH)[None, :].repeat(HEIGHT, axis=0)
    return (
        np.round(ramp * top).astype(colours.dtype)
        if colours.dtype.kind != "f"
        else ramp.astype(colours.dtype)
    )


def spread(values: Array, bits: int) -> Array:
    """Return integers of an odd depth on the scale of whole bytes, in exact arithmetic."""
    whole = 8 if bits <= 8 else 16
    top, wide = 2**bits - 1, 2**whole - 1
    rounded = (2 * values.astype(np.int64) * wide + top) // (2 * top)
    return rounded.astype(np.uint8 if whole == 8 else np.uint16)


def tiff(data: Array, **options: Any) -> Callable[[], bytes]:
    """Return a maker of a TIFF by tifffile."""

    def make() -> bytes:
        buffer = io.BytesIO()
        byteorder, big = options.get("byteorder", "<"), options.get("bigtiff", False)
        rest = {k: v for k, v in options.items() if k not in ("byteorder", "bigtiff")}
        rest.setdefault("photometric", "rgb" if data.ndim == 3 else "minisblack")
        with tifffile.TiffWriter(buffer, byteorder=byteorder, bigtiff=big) as writer:
            writer.write(data, metadata=None, software=False, **rest)
        return buffer.getvalue()

    return make


def libtiff(data: Array, **options: Any) -> Callable[[], bytes]:
    """Return a maker of a TIFF by libtiff."""
    return lambda: bytes(imagecodecs.tiff_encode(data, **options))


def pillow(data: Array, kind: str, mode: str | None = None, **options: Any) -> Callable[[], bytes]:
    """Return a maker of any file by Pillow."""

    def make() -> bytes:
        buffer = io.BytesIO()
        image = Image.frombytes(mode, data.shape[1::-1], data.tobytes()) if mode else Image.fromarray(data)
        image.save(buffer, kind, **options)
        return buffer.getvalue()

    return make


def all_variants() -> list[Variant]:
    """Return the whole matrix."""
    makers = (
        _compressions,
        _layouts,
        _floats,
        _greys,
        _alphas,
        _odd_depths,
        _converted_tiffs,
        _codec_tiffs,
        _many_pages,
        _libtiff_files,
        _refused_tiffs,
        _pngs,
        _coloured_pngs,
        _jpegs,
    )
    return [variant for maker in makers for variant in maker()]


# --- TIFF -----------------------------------------------------------------------------------------------


def _compressions() -> Iterator[Variant]:
    for bits in (8, 16):
        data = picture(bits)
        for name in (None, "lzw", "deflate", "zstd", "packbits", "lzma"):
            label = name or "none"
            facts = {
                "compression": {
                    None: 1,
                    "lzw": 5,
                    "deflate": 8,
                    "zstd": 50000,
                    "packbits": 32773,
                    "lzma": 34925,
                }[name]
            }
            yield Variant(f"tiff {bits} bit {label}", ".tif", tiff(data, compression=name), data, facts=facts)
        for name in ("lzw", "deflate", "zstd", "lzma"):
            make = tiff(data, compression=name, predictor=2, rowsperstrip=7)
            yield Variant(
                f"tiff {bits} bit {name} predictor strips", ".tif", make, data, facts={"predictor": 2}
            )
        make = tiff(data, compression=32946, predictor=2)
        yield Variant(f"tiff {bits} bit older deflate", ".tif", make, data, facts={"compression": 8})


def _layouts() -> Iterator[Variant]:
    for bits in (8, 16):
        data = picture(bits)
        planar = np.ascontiguousarray(np.moveaxis(data, -1, 0))
        yield Variant(
            f"tiff {bits} bit big-endian", ".tif", tiff(data, byteorder=">"), data, facts={"byteorder": ">"}
        )
        yield Variant(
            f"tiff {bits} bit BigTIFF", ".tif", tiff(data, bigtiff=True), data, facts={"bigtiff": True}
        )
        make = tiff(data, bigtiff=True, byteorder=">", compression="deflate", predictor=2, tile=(16, 32))
        facts = {"bigtiff": True, "byteorder": ">", "tile": (16, 32)}
        yield Variant(f"tiff {bits} bit BigTIFF big-endian tiles", ".tif", make, data, facts=facts)
        yield Variant(
            f"tiff {bits} bit tiles", ".tif", tiff(data, tile=(16, 16)), data, facts={"tile": (16, 16)}
        )
        make = tiff(planar, planarconfig="separate")
        yield Variant(f"tiff {bits} bit planar", ".tif", make, data, facts={"planar": True})
        make = tiff(planar, planarconfig="separate", compression="zstd", predictor=2, rowsperstrip=10)
        yield Variant(f"tiff {bits} bit planar strips zstd", ".tif", make, data, facts={"planar": True})
        make = tiff(planar, planarconfig="separate", compression="lzw", tile=(32, 32))
        yield Variant(
            f"tiff {bits} bit planar tiles lzw", ".tif", make, data, facts={"planar": True, "tile": (32, 32)}
        )
        make = tiff(data, resolution=((3000, 7), (3001, 10)), resolutionunit=3)
        facts = {"resolution": ((3000, 7), (3001, 10), 3)}
        yield Variant(f"tiff {bits} bit resolution", ".tif", make, data, facts=facts)
    yield Variant("tiff reversed bits", ".tif", _reversed_bits(picture(8)), picture(8))
    data = picture(8)
    tags = tiff_writer.rgb_tags(WIDTH, HEIGHT)
    for name, change in (("kind of colours not told", {262: None}), ("depth told once", {258: ("H", (8,))})):
        make = partial(tiff_writer.tiff, tags | change, [data.tobytes()])
        yield Variant(f"tiff {name}", ".tif", make, data)
    make = tiff(picture(16), tile=(128, 128), compression="zstd")
    yield Variant("tiff tile larger than the picture", ".tif", make, picture(16), facts={"tile": (128, 128)})
    one = picture(16)[:1, :1]
    yield Variant("tiff one pixel", ".tif", tiff(one), one)


def _reversed_bits(data: Array) -> Callable[[], bytes]:
    flipped = np.packbits(np.unpackbits(data.reshape(-1, 1), axis=1)[:, ::-1], axis=1).tobytes()
    tags = tiff_writer.rgb_tags(data.shape[1], data.shape[0]) | {266: ("H", (2,))}
    return lambda: tiff_writer.tiff(tags, [flipped])


def _floats() -> Iterator[Variant]:
    light = (picture(16).astype(np.float32) / 40000.0) ** 2  # goes above 1
    for dtype in (np.float16, np.float32, np.float64):
        data = light.astype(dtype)
        name = f"tiff {8 * data.itemsize} bit float"
        expected = data.astype(np.float32)
        flags = ("profile-assumed",)
        yield Variant(name, ".tif", tiff(data), expected, flags=flags)
        for compression, predictor in (("deflate", 3), ("zstd", 3), ("lzw", None)):
            make = tiff(data, compression=compression, predictor=predictor)
            label = f"{name} {compression} predictor {predictor}" if predictor else f"{name} {compression}"
            yield Variant(label, ".tif", make, expected, flags=flags, facts={"predictor": predictor or 1})
        make = tiff(data, byteorder=">", compression="deflate", predictor=3, tile=(16, 16))
        yield Variant(f"{name} big-endian tiles", ".tif", make, expected, flags=flags)


def _greys() -> Iterator[Variant]:
    for bits in (8, 16):
        data = picture(bits, 1)[..., 0]
        expected = data[..., None].repeat(3, axis=2)
        yield Variant(f"tiff {bits} bit grey", ".tif", tiff(data), expected, facts={"kind": "grey"})
        top = 2**bits - 1
        make = tiff((top - data).astype(data.dtype), photometric="miniswhite", compression="lzw")
        facts = {"kind": "grey", "min_is_white": True}
        yield Variant(f"tiff {bits} bit grey, min is white", ".tif", make, expected, facts=facts)
        both = np.stack([data, alpha_of(data)], axis=-1)
        make = tiff(both, photometric="minisblack", planarconfig="contig", extrasamples=["unassalpha"])
        yield Variant(
            f"tiff {bits} bit grey with alpha", ".tif", make, expected, alpha_of(data), facts={"kind": "grey"}
        )
    light = (picture(16, 1)[..., 0] / 65535).astype(np.float32)
    make = tiff(light, compression="deflate", predictor=3)
    yield Variant(
        "tiff 32 bit float grey", ".tif", make, light[..., None].repeat(3, axis=2), flags=("profile-assumed",)
    )


def _alphas() -> Iterator[Variant]:
    for bits in (8, 16):
        data = picture(bits)
        alpha = alpha_of(data)
        for kind, name in (("unassalpha", "straight"), ("unspecified", "unspecified")):
            make = tiff(np.dstack([data, alpha]), extrasamples=[kind], compression="lzw", predictor=2)
            yield Variant(f"tiff {bits} bit alpha {name}", ".tif", make, data, alpha, facts={"alpha": name})
        planar = np.ascontiguousarray(np.moveaxis(np.dstack([data, alpha]), -1, 0))
        make = tiff(planar, planarconfig="separate", extrasamples=["unassalpha"])
        yield Variant(f"tiff {bits} bit alpha planar", ".tif", make, data, alpha, facts={"planar": True})
        top = 2**bits - 1
        multiplied = np.floor(data * (alpha[..., None] / top) + 0.5).astype(data.dtype)
        make = tiff(np.dstack([multiplied, alpha]), extrasamples=["assocalpha"])
        share = np.maximum(alpha[..., None], 1) / top
        divided = np.floor(multiplied / share + 0.5).astype(data.dtype)
        yield Variant(
            f"tiff {bits} bit alpha associated", ".tif", make, divided, alpha, facts={"alpha": "associated"}
        )
    light = (picture(16) / 65535).astype(np.float32)
    alpha = alpha_of(light)
    make = tiff(np.dstack([light, alpha]), extrasamples=["unassalpha"])
    yield Variant("tiff 32 bit float alpha", ".tif", make, light, alpha, flags=("profile-assumed",))


def _odd_depths() -> Iterator[Variant]:
    for bits in (3, 5, 7, 9, 11, 13, 15):
        data = picture(bits)
        make = tiff(data, bitspersample=bits)
        yield Variant(f"tiff {bits} bit packed", ".tif", make, spread(data, bits), facts={"bits": bits})
    for bits in (10, 12, 14):
        data = picture(bits)
        yield Variant(
            f"tiff {bits} bit packed",
            ".tif",
            tiff(data, bitspersample=bits),
            spread(data, bits),
            facts={"bits": bits},
        )
        grey = picture(bits, 1)[..., 0]
        expected = spread(grey, bits)[..., None].repeat(3, axis=2)
        yield Variant(
            f"tiff {bits} bit packed grey",
            ".tif",
            tiff(grey, bitspersample=bits),
            expected,
            facts={"bits": bits},
        )
    for bits in (2, 4, 6):
        grey = picture(bits, 1)[..., 0]
        expected = spread(grey, bits)[..., None].repeat(3, axis=2)
        yield Variant(
            f"tiff {bits} bit packed grey",
            ".tif",
            tiff(grey, bitspersample=bits),
            expected,
            facts={"bits": bits},
        )
    rng = np.random.default_rng(5)
    coarse = rng.integers(0, 2**16, (HEIGHT, WIDTH, 3)).astype(np.uint32)
    for bits in (24, 32):  # a float holds 24 bits exactly
        data = (coarse << (bits - 16)).astype(np.uint32)
        expected = (data / (2.0**bits - 1)).astype(np.float32)
        make = tiff(data, bitspersample=bits) if bits == 24 else tiff(data, compression="deflate")
        yield Variant(f"tiff {bits} bit integer", ".tif", make, expected, facts={"bits": bits})


def _converted_tiffs() -> Iterator[Variant]:
    flags = ("converted",)
    rng = np.random.default_rng(3)
    colours = rng.integers(0, 256, (256, 3)).astype(np.uint8)
    indices = rng.integers(0, 256, (HEIGHT, WIDTH)).astype(np.uint8)
    wide = (colours.astype(np.uint16) * 257).T
    for name, compression in (("none", None), ("packbits", "packbits")):
        make = tiff(indices, photometric="palette", colormap=wide, compression=compression)
        yield Variant(f"tiff palette {name}", ".tif", make, colours[indices], fate="converted", flags=flags)
    deep = rng.integers(0, 65536, (3, 256)).astype(np.uint16)
    make = tiff(indices, photometric="palette", colormap=deep)
    yield Variant(
        "tiff palette of deep colours", ".tif", make, deep.T[indices], fate="converted", flags=flags
    )
    both = np.dstack([indices, alpha_of(indices)])
    tags = tiff_writer.rgb_tags(WIDTH, HEIGHT) | {
        258: ("H", (8, 8)),
        262: ("H", (3,)),
        277: ("H", (2,)),
        338: ("H", (2,)),
        320: ("H", tuple(deep.ravel().tolist())),
    }
    make = partial(tiff_writer.tiff, tags, [both.tobytes()])
    alpha = alpha_of(indices).astype(np.uint16) * 257
    yield Variant("tiff palette with alpha", ".tif", make, deep.T[indices], alpha, "converted", flags)
    for bits in (8, 16):
        inks = picture(bits, 4)
        make = tiff(inks, photometric="separated", compression="deflate")
        both = ("converted", "profile-assumed")
        yield Variant(
            f"tiff {bits} bit CMYK without a profile", ".tif", make, None, fate="converted", flags=both
        )
        profile = made_profiles.table_profile(b"CMYK", made_profiles.lab_of_inks)
        make = tiff(inks, photometric="separated", iccprofile=profile)
        yield Variant(f"tiff {bits} bit CMYK", ".tif", make, None, fate="converted", flags=flags)
        make = tiff(_stored_lab(bits, signed=True), photometric="cielab")
        yield Variant(f"tiff {bits} bit CIELAB", ".tif", make, None, fate="converted", flags=flags)
        make = tiff(_stored_lab(bits, signed=False), photometric="icclab")
        yield Variant(f"tiff {bits} bit ICC Lab", ".tif", make, None, fate="converted", flags=flags)
    profile = made_profiles.table_profile(b"RGB ", made_profiles.lab_of_rgb)
    for bits in (8, 16):
        make = tiff(picture(bits), iccprofile=profile)
        yield Variant(f"tiff {bits} bit table profile", ".tif", make, None, fate="converted", flags=flags)


def lab_picture() -> Array:
    """Return L* a* b* of moderate colours (H, W, 3)."""
    ramps = picture(16).astype(np.float64) / 65535
    return np.stack([20 + 70 * ramps[..., 0], 40 * ramps[..., 1] - 20, 40 * ramps[..., 2] - 20], axis=-1)


def _stored_lab(bits: int, *, signed: bool) -> Array:
    lab, step = lab_picture(), 2 ** (bits - 8)
    lightness = np.round(lab[..., :1] / 100 * (2**bits - 1))
    chroma = np.round(lab[..., 1:] * step) + (0 if signed else 128 * step)
    whole = np.concatenate([lightness, chroma], axis=-1).astype(np.int64) & (2**bits - 1)
    return whole.astype(np.uint8 if bits == 8 else np.uint16)


def _codec_tiffs() -> Iterator[Variant]:
    for bits in (8, 16):
        data = picture(bits)
        yield Variant(
            f"tiff {bits} bit JPEG XL lossless",
            ".tif",
            tiff(data, compression="jpegxl"),
            data,
            facts={"compression": 8},
        )
        make = tiff(data, compression="jpeg2000", compressionargs={"reversible": True})
        yield Variant(f"tiff {bits} bit JPEG 2000 lossless", ".tif", make, data, facts={"compression": 8})
        yield Variant(
            f"tiff {bits} bit LERC", ".tif", tiff(data, compression="lerc"), data, facts={"compression": 8}
        )
        yield Variant(
            f"tiff {bits} bit PNG", ".tif", tiff(data, compression="png"), data, facts={"compression": 8}
        )
    make = tiff(picture(8), compression="webp", compressionargs={"lossless": True})
    yield Variant("tiff 8 bit WebP lossless", ".tif", make, picture(8), facts={"compression": 8})
    names = {1: "not compressed", 5: "lzw", 8: "deflate"}
    for across, down, code in ((2, 2, 1), (2, 1, 5), (1, 1, 8), (4, 4, 1), (1, 2, 5)):
        name = f"tiff luma and chroma {across}x{down}, {names[code]}"
        yield Variant(
            name, ".tif", tiff_writer.ycbcr(smooth(), across, down, code), facts={"compression": code}
        )
    for name, options in (
        ("4:2:0", {"photometric": "ycbcr", "subsampling": (2, 2)}),
        ("4:4:4 tiles", {"photometric": "ycbcr", "subsampling": (1, 1), "tile": (32, 32)}),
        ("RGB", {"photometric": "rgb"}),
    ):
        make = tiff(smooth(), compression="jpeg", compressionargs={"level": 95}, **options)
        yield Variant(f"tiff JPEG {name}", ".tif", make, None, facts={"compression": 8})
    make = tiff(smooth(1)[..., 0], compression="jpeg", compressionargs={"level": 95})
    yield Variant("tiff JPEG grey", ".tif", make, None, facts={"compression": 8, "kind": "grey"})


def _many_pages() -> Iterator[Variant]:
    flags = ("page-chosen",)
    data = picture(16)
    yield Variant("tiff preview first", ".tif", _pages(data[::4, ::4], data), data, flags=flags)
    yield Variant(
        "tiff two pages of one size", ".tif", _pages(data, data[::-1], reduced=()), data, flags=flags
    )
    yield Variant("tiff sub-picture holds the whole", ".tif", _sub_picture(data), data, flags=flags)


def _pages(*pages: Array, reduced: tuple[int, ...] = (0,)) -> Callable[[], bytes]:
    def make() -> bytes:
        buffer = io.BytesIO()
        with tifffile.TiffWriter(buffer) as writer:
            for index, page in enumerate(pages):
                kind = 1 if index in reduced else 0
                writer.write(page, photometric="rgb", metadata=None, software=False, subfiletype=kind)
        return buffer.getvalue()

    return make


def _sub_picture(data: Array) -> Callable[[], bytes]:
    def make() -> bytes:
        buffer = io.BytesIO()
        with tifffile.TiffWriter(buffer) as writer:
            writer.write(data[::4, ::4], photometric="rgb", metadata=None, subifds=1, subfiletype=1)
            writer.write(data, photometric="rgb", metadata=None, compression="deflate")
        return buffer.getvalue()

    return make


def _libtiff_files() -> Iterator[Variant]:
    for bits in (8, 16):
        data = picture(bits)
        for name, code in (("none", 1), ("lzw", 5), ("deflate", 8), ("zstd", 50000), ("packbits", 32773)):
            options: dict[str, Any] = {"compression": code, "photometric": 2}
            if code in (5, 8, 50000):
                options["predictor"] = 2
            yield Variant(f"libtiff {bits} bit {name}", ".tif", libtiff(data, **options), data)
        yield Variant(
            f"libtiff {bits} bit big-endian tiles", ".tif", libtiff(data, byteorder=">", tile=(16, 16)), data
        )
    for name, mode in (("raw", None), ("tiff_lzw", None), ("tiff_adobe_deflate", None), ("packbits", None)):
        yield Variant(
            f"Pillow {name}", ".tif", pillow(picture(8), "TIFF", mode, compression=name), picture(8)
        )


def _refused_tiffs() -> Iterator[Variant]:
    def refused(name: str, make: Callable[[], bytes]) -> Variant:
        return Variant(f"tiff {name}", ".tif", make, fate="refused")

    grey = picture(8, 1)[..., 0]
    yield refused("1 bit grey", tiff(grey > 127, photometric="minisblack"))
    yield refused("complex numbers", tiff(grey.astype(np.complex64)))
    five = np.dstack([picture(8), grey, grey])
    yield refused("5 channels", tiff(five, extrasamples=["unspecified", "unspecified"]))
    yield refused("signed integers", tiff(picture(16).astype(np.int16), photometric="rgb"))
    volume = np.stack([picture(8)] * 4)
    yield refused("a volume", tiff(volume, volumetric=True, tile=(16, 16, 16), photometric="rgb"))
    yield refused(
        "channels of different depths",
        lambda: tiff(picture(8))().replace(b"\x08\0\x08\0\x08\0", b"\x08\0\x08\0\x04\0"),
    )
    yield refused("a mask only", tiff(grey, photometric="mask"))


# --- PNG ------------------------------------------------------------------------------------------------


def _pngs() -> Iterator[Variant]:
    write = png_writer.png
    for bits in (8, 16):
        data, grey = picture(bits), picture(bits, 1)[..., 0]
        three, alpha = grey[..., None].repeat(3, axis=2), alpha_of(data)
        flags = ("profile-assumed",) if bits == 16 else ()
        for interlaced in (False, True):
            label = " interlaced" if interlaced else ""
            yield Variant(
                f"png {bits} bit{label}", ".png", write(data, bits, interlaced=interlaced), data, flags=flags
            )
            make = write(grey, bits, interlaced=interlaced)
            yield Variant(
                f"png {bits} bit grey{label}", ".png", make, three, flags=flags, facts={"kind": "grey"}
            )
            make = write(np.dstack([data, alpha]), bits, interlaced=interlaced)
            yield Variant(f"png {bits} bit alpha{label}", ".png", make, data, alpha, flags=flags)
            make = write(np.dstack([grey, alpha]), bits, interlaced=interlaced)
            yield Variant(f"png {bits} bit grey alpha{label}", ".png", make, three, alpha, flags=flags)
        key = data[3, 5]
        cut = np.where((data == key).all(axis=2), 0, 2**bits - 1).astype(data.dtype)
        make = write(data, bits, extra=[(b"tRNS", np.asarray(key, ">u2").tobytes())])
        yield Variant(f"png {bits} bit colour key", ".png", make, data, cut, flags=flags)
        cut = np.where(grey == grey[3, 5], 0, 2**bits - 1).astype(data.dtype)
        make = write(grey, bits, extra=[(b"tRNS", np.asarray([grey[3, 5]], ">u2").tobytes())])
        yield Variant(f"png {bits} bit grey key", ".png", make, three, cut, flags=flags)
    for bits in (2, 4):
        grey = picture(bits, 1)[..., 0]
        yield Variant(
            f"png {bits} bit grey", ".png", write(grey, bits), spread(grey, bits)[..., None].repeat(3, axis=2)
        )
    yield from _palette_pngs()
    grey = picture(1, 1)[..., 0]
    yield Variant("png 1 bit grey", ".png", write(grey, 1), fate="refused")
    yield Variant(
        "png written by libpng",
        ".png",
        lambda: bytes(imagecodecs.png_encode(picture(16))),
        picture(16),
        flags=("profile-assumed",),
    )
    yield Variant("png written by Pillow", ".png", pillow(picture(8), "PNG"), picture(8))


def _palette_pngs() -> Iterator[Variant]:
    rng = np.random.default_rng(7)
    for bits in (1, 2, 4, 8):
        colours = rng.integers(0, 256, (2**bits, 3)).astype(np.uint8)
        indices = rng.integers(0, 2**bits, (HEIGHT, WIDTH)).astype(np.uint8)
        make = png_writer.png(indices, bits, palette=colours)
        yield Variant(
            f"png {bits} bit palette", ".png", make, colours[indices], fate="converted", flags=("converted",)
        )
        opacity = np.full(2**bits, 255, np.uint8)
        opacity[:2] = (0, 90)
        make = png_writer.png(
            indices, bits, palette=colours, extra=[(b"tRNS", opacity[:2].tobytes())], interlaced=True
        )
        yield Variant(
            f"png {bits} bit palette with alpha",
            ".png",
            make,
            colours[indices],
            opacity[indices],
            "converted",
            ("converted",),
        )


def _coloured_pngs() -> Iterator[Variant]:
    data = picture(16)
    chunks = {
        "sRGB chunk": [(b"gAMA", (45455).to_bytes(4, "big")), (b"sRGB", b"\0")],
        "gamma 1": [(b"gAMA", (100000).to_bytes(4, "big"))],
        "gamma and primaries": [
            (b"gAMA", (55556).to_bytes(4, "big")),
            (b"cHRM", png_writer.chromaticities()),
        ],
        "code points of Display P3": [(b"cICP", bytes([12, 13, 0, 1]))],
        "code points of Rec.2020": [(b"cICP", bytes([9, 14, 0, 1]))],
    }
    for name, extra in chunks.items():
        yield Variant(f"png {name}", ".png", png_writer.png(data, 16, extra=extra), data)
    make = png_writer.png(data, 16, extra=[(b"cICP", bytes([9, 16, 0, 1]))])
    yield Variant("png coded for HDR screens", ".png", make, fate="refused")
    extra = [(b"acTL", bytes(8))]
    yield Variant(
        "png animated", ".png", png_writer.png(picture(8), 8, extra=extra), picture(8), flags=("page-chosen",)
    )


# --- JPEG -----------------------------------------------------------------------------------------------


def _jpegs() -> Iterator[Variant]:
    data = smooth()
    for name, options in (
        ("4:4:4", {"subsampling": 0}),
        ("4:2:2", {"subsampling": 1}),
        ("4:2:0", {"subsampling": 2}),
        ("progressive", {"subsampling": 2, "progressive": True}),
        ("restarts", {"subsampling": 2, "restart_marker_blocks": 3}),
        ("optimised", {"subsampling": 0, "optimize": True}),
        ("stored as RGB", {"keep_rgb": True}),
    ):
        yield Variant(f"jpeg {name}", ".jpg", pillow(data, "JPEG", quality=90, **options))
    yield Variant("jpeg grey", ".jpg", pillow(data[..., 0], "JPEG", quality=90), facts={"kind": "grey"})
    yield Variant("jpeg grey progressive", ".jpg", pillow(data[..., 0], "JPEG", quality=90, progressive=True))
    flags = ("profile-assumed", "converted")
    inks = smooth(4)
    yield Variant(
        "jpeg CMYK", ".jpg", pillow(inks, "JPEG", "CMYK", quality=95), fate="converted", flags=flags
    )
    profile = made_profiles.table_profile(b"CMYK", made_profiles.lab_of_inks)
    make = pillow(inks, "JPEG", "CMYK", quality=95, icc_profile=profile)
    yield Variant("jpeg CMYK with a profile", ".jpg", make, fate="converted", flags=("converted",))
    yield Variant("jpeg YCCK", ".jpg", _ycck(inks), fate="converted", flags=flags)
    for name, options in (("4:1:1", {"subsampling": "411"}), ("4:4:0", {"subsampling": "440"})):
        yield Variant(
            f"jpeg {name}", ".jpg", lambda o=options: bytes(imagecodecs.jpeg8_encode(data, level=90, **o))
        )
    yield Variant(
        "jpeg of 12 bits",
        ".jpg",
        lambda: bytes(imagecodecs.jpeg8_encode(picture(12, 1)[..., 0], level=95, bitspersample=12)),
        fate="refused",
    )
    yield Variant(
        "jpeg lossless",
        ".jpg",
        lambda: bytes(imagecodecs.ljpeg_encode(picture(12, 1)[..., 0], bitspersample=12)),
        fate="refused",
    )


def _ycck(inks: Array) -> Callable[[], bytes]:
    """Return a maker of inks coded as luma and chroma, the way print shops send them (Adobe marker, inverted)."""
    return lambda: bytes(
        imagecodecs.jpeg8_encode(255 - inks, level=95, colorspace="CMYK", outcolorspace="YCCK")
    )
