"""A table of bad inputs: how each is made, the sentence that a user reads, the exit status."""

import gzip
import os
import pickle
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import tifffile
from astropy.io import fits

from frames.written import fits_bytes, write_fits

RECIPE = """\
name: test
sensor: {technology: ccd, pixel_pitch: 15 um}
frames: {kind: IMAGETYP}
"""
IMAGE_CARDS = ["SIMPLE  = T", "BITPIX  = 16", "NAXIS   = 2", "NAXIS1  = 32", "NAXIS2  = 32"]
KIND_CARD = "IMAGETYP= 'bias'"


@dataclass(frozen=True)
class Bench:
    """A folder of healthy frames with a recipe, to be spoiled."""

    root: Path

    @property
    def frames(self) -> Path:
        """The source."""
        return self.root / "frames"

    @property
    def recipe(self) -> Path:
        """The recipe file."""
        return self.root / "recipe.yaml"

    def image(self, level: float = 1000.0, seed: int = 0) -> np.ndarray:
        """A frame of noise."""
        return np.random.default_rng(seed).normal(level, 5, (32, 32)).astype(np.uint16)

    def put(self, name: str, kind: str = "bias", image: np.ndarray | None = None, **cards) -> Path:
        """Write one more FITS frame."""
        image = self.image(seed=sum(name.encode())) if image is None else image
        return write_fits(self.frames / name, image, IMAGETYP=kind, **({"EXPTIME": 0.0} | cards))

    def write(self, name: str, content: bytes) -> Path:
        """Write one more file of any content."""
        path = self.frames / name
        path.write_bytes(content)
        return path

    def rules(self, text: str) -> None:
        """Write the recipe with these frame rules."""
        self.recipe.write_text(RECIPE.replace("{kind: IMAGETYP}", text))


@dataclass(frozen=True)
class Case:
    """``spoil`` changes a healthy bench; ``sentence`` must stand in what is printed."""

    name: str
    spoil: Callable[[Bench], object]
    sentence: str
    status: int = 1
    source: str = "frames"


def healthy_bench(root: Path) -> Bench:
    """Four bias frames without any fault."""
    bench = Bench(root)
    bench.frames.mkdir()
    bench.rules("{kind: IMAGETYP}")
    for number in range(4):
        bench.put(f"b{number}.fits")
    return bench


def _emptied(bench: Bench) -> None:
    for path in bench.frames.iterdir():
        path.unlink()


def _only(bench: Bench, name: str, content: bytes) -> None:
    _emptied(bench)
    bench.write(name, content)


def _cards(*cards: str) -> Callable[[Bench], object]:
    """A FITS file of these cards and 32 x 32 samples."""
    return lambda bench: bench.write("x.fits", fits_bytes(list(cards), b"\1" * 2048))


def _several_images(bench: Bench) -> None:
    units = [fits.PrimaryHDU(), fits.ImageHDU(bench.image()), fits.ImageHDU(bench.image())]
    fits.HDUList(units).writeto(bench.frames / "x.fits")


def _tiles(bench: Bench, *, cut: int = 0, gz: bool = False) -> None:
    path = bench.frames / "x.fits.fz"
    primary = fits.PrimaryHDU()
    primary.header["IMAGETYP"] = "bias"
    unit = fits.CompImageHDU(bench.image(seed=9), compression_type="RICE_1")
    fits.HDUList([primary, unit]).writeto(path)
    content = bytearray(path.read_bytes())
    path.unlink()
    if cut:
        content = content[:-cut]
    bench.write("x.fits.gz" if gz else path.name, gzip.compress(content) if gz else content)


def _damaged_tiles(bench: Bench) -> None:
    _tiles(bench)
    path = bench.frames / "x.fits.fz"
    content = path.read_bytes()
    path.write_bytes(content.replace(b"'RICE_1  '", b"'NONE_9  '"))


def _gzip_damaged(bench: Bench) -> None:
    content = gzip.compress(bench.put("x.fits").read_bytes())
    (bench.frames / "x.fits").unlink()
    bench.write("x.fits.gz", content[: len(content) // 2])


def _bomb(bench: Bench) -> None:
    cards = [*IMAGE_CARDS[:3], "NAXIS1  = 30000", "NAXIS2  = 30000", KIND_CARD]
    bench.write("x.fits.gz", gzip.compress(fits_bytes(cards, b"\0" * 10**6)))


def _tiff(bench: Bench, image: np.ndarray, *, cut: int = 0, **how: object) -> None:
    path = bench.frames / "x.tif"
    tifffile.imwrite(path, image, description="IMAGETYP = bias", metadata=None, **how)
    if cut:
        path.write_bytes(path.read_bytes()[:-cut])


def _npy(bench: Bench, array: np.ndarray, *, cut: int = 0) -> None:
    path = bench.frames / "x.npy"
    np.save(path, array, allow_pickle=True)
    if cut:
        path.write_bytes(path.read_bytes()[:-cut])


def _raw(bench: Bench, rules: str) -> None:
    bench.rules("{kind: IMAGETYP" + rules + "}")
    bench.write("x.raw", b"\0" * 100)


def _manifest(bench: Bench, content: bytes | None) -> None:
    bench.rules("{sorted_by: manifest, manifest: list.csv, kind: kind}")
    if content is not None:
        bench.write("list.csv", content)


LISTED = b"file,kind\nb0.fits,bias\nb1.fits,bias\nb2.fits,bias\nb3.fits,bias\n"


def _named(bench: Bench) -> None:
    bench.rules('{sorted_by: name, pattern: "(?P<kind>b)[0-9]", kinds: {b: bias}}')
    bench.put("stray.fits")


def _serials(bench: Bench) -> None:
    bench.put("s1.fits", SERIAL="A1")
    bench.put("s2.fits", SERIAL="B2")


def _results(bench: Bench) -> None:
    (bench.frames / "out").mkdir()
    (bench.frames / "out" / "lot.sqlite").write_bytes(b"")
    write_fits(bench.frames / "out" / "master_bias.fits", bench.image())


def _dark(bench: Bench, **cards: object) -> None:
    for number in range(3):
        image = bench.image(1010, seed=20 + number)
        bench.put(f"d{number}.fits", "dark", image, **({"EXPTIME": 5.0} | cards))


def _without_exposure(bench: Bench) -> None:
    _dark(bench)
    for path in bench.frames.glob("d*.fits"):
        path.write_bytes(path.read_bytes().replace(b"EXPTIME ", b"OTHER   "))


def _mirrored(bench: Bench) -> None:
    fixed = np.random.default_rng(3).normal(0, 20, (32, 32))
    for number in range(4):
        image = (bench.image(seed=number) + fixed).astype(np.uint16)
        bench.put(f"f{number}.fits", "dark", image[:, ::-1] if number == 3 else image, EXPTIME=1.0)


def _stuck_bit(bench: Bench) -> None:
    for number in range(12):
        image = np.random.default_rng(number).normal(1000, 40, (32, 32)).astype(np.uint16)
        bench.put(f"s{number}.fits", "dark", image & ~np.uint16(8), EXPTIME=1.0)
    for path in bench.frames.glob("b*.fits"):
        path.unlink()


def _outputs(bench: Bench, text: str) -> None:
    bench.recipe.write_text(
        f"name: test\nsensor:\n  technology: ccd\n  pixel_pitch: 15 um\n  outputs: {text}\n"
    )


def _stated(bench: Bench, section: str | None) -> None:
    """Healthy frames that state a section, and one that states another or none."""
    _emptied(bench)
    for number in range(4):
        bench.put(f"b{number}.fits", DSEC1="[1:32,1:32]")
    bench.put("x.fits", **({} if section is None else {"DSEC1": section}))


class Bait:
    """Would print if it were unpickled."""

    def __reduce__(self) -> tuple[object, ...]:
        return print, ("a pickle was run",)


FRAMES = [
    Case("no such source", lambda b: None, "gone: no such source", 2, "gone"),
    Case("source is a file", lambda b: None, "b0.fits: is no folder", 2, "frames/b0.fits"),
    Case("source holds nothing", _emptied, "holds no frames; they are files named", 2),
    Case("source holds text", lambda b: _only(b, "a.txt", b"x"), "holds no frames", 2),
    Case(
        "nothing can be used",
        lambda b: _only(b, "x.fits", b"x"),
        "none of its 1 files can be used; the first is x.fits: truncated",
        2,
    ),
    Case(
        "link to itself as source",
        lambda b: (b.root / "loop").symlink_to(b.root / "loop"),
        "loop: no such source",
        2,
        "loop",
    ),
    Case("empty file", lambda b: b.write("x.fits", b""), "x.fits: truncated: the file ends within"),
    Case(
        "truncated header",
        lambda b: b.write("x.fits", fits_bytes(IMAGE_CARDS)[:1000]),
        "x.fits: truncated: the file ends within a FITS header",
    ),
    Case(
        "truncated samples",
        lambda b: b.write("x.fits", fits_bytes([*IMAGE_CARDS, KIND_CARD], b"\0" * 2048)[:4000]),
        "x.fits: truncated: the image ends at byte 4928, the file has 4000",
    ),
    Case("text named fits", lambda b: b.write("x.fits", b"x" * 2880 * 2001), "longer than 72000"),
    Case("not simple", _cards("SIMPLE  = F", *IMAGE_CARDS[1:]), "is not FITS: its first card"),
    Case("bitpix 12", _cards("SIMPLE  = T", "BITPIX  = 12"), "BITPIX is 12; FITS has 8, 16"),
    Case("bitpix text", _cards("SIMPLE  = T", "BITPIX  = 'a'"), "BITPIX is 'a'; FITS has 8, 16"),
    Case("no axes count", _cards(*IMAGE_CARDS[:2]), "NAXIS is None; FITS has 0 to 999"),
    Case("axis missing", _cards(*IMAGE_CARDS[:4]), "NAXIS2 is None; FITS has whole numbers"),
    Case(
        "axis negative",
        _cards(*IMAGE_CARDS[:4], "NAXIS2  = -32"),
        "NAXIS2 is -32; FITS has whole numbers",
    ),
    Case(
        "absurd dimensions",
        _cards(*IMAGE_CARDS[:3], "NAXIS1  = 999999", "NAXIS2  = 999999"),
        "states 999999 x 999999 pixels (rows x columns), more than",
    ),
    Case(
        "axis of no pixels",
        lambda b: b.write("x.fits", fits_bytes([*IMAGE_CARDS[:4], "NAXIS2  = 0", KIND_CARD])),
        "x.fits: holds no image; take it out",
    ),
    Case(
        "cube",
        lambda b: b.put("x.fits", image=np.zeros((2, 32, 32), np.uint16)),
        "its image has 3 axes (32 x 32 x 2); a frame has two",
    ),
    Case(
        "row of pixels",
        lambda b: b.put("x.fits", image=np.zeros(32, np.uint16)),
        "its image has 1 axes (32); a frame has two",
    ),
    Case(
        "table only",
        lambda b: fits.BinTableHDU.from_columns([fits.Column("x", "J", array=[1])]).writeto(
            b.frames / "x.fits"
        ),
        "x.fits: holds no image",
    ),
    Case("several images", _several_images, "holds 2 images (1, 2); name the extension"),
    Case(
        "extension missing",
        lambda b: _outputs(b, "{a: {extension: A}}"),
        "has no image extension 'A'; it has 0",
        2,
    ),
    Case("scale is text", _cards(*IMAGE_CARDS, "BSCALE  = 'x'", KIND_CARD), "BSCALE is 'x'; FITS"),
    Case("zero is text", _cards(*IMAGE_CARDS, "BZERO   = 'x'", KIND_CARD), "BZERO is 'x'; FITS"),
    Case("blank is text", _cards(*IMAGE_CARDS, "BLANK   = 'x'", KIND_CARD), "BLANK is 'x'; FITS"),
    Case(
        "blank samples",
        _cards(*IMAGE_CARDS, "BZERO   = 32768", "BLANK   = 257", KIND_CARD),
        "or more undefined samples (BLANK = 257)",
    ),
    Case(
        "zero of the wrong sign",
        _cards(*IMAGE_CARDS, "BZERO   = -32768", KIND_CARD),
        "BZERO is -32768, the opposite of the standard's sign for unsigned numbers",
    ),
    Case("gzip damaged", _gzip_damaged, "its gzip stream is damaged"),
    Case("gzip bomb", _bomb, "claims to expand from"),
    Case("compressed twice", lambda b: _tiles(b, gz=True), "compressed twice, by tiles and"),
    Case("tiles truncated", lambda b: _tiles(b, cut=2800), "x.fits.fz: truncated: the image ends"),
    Case("tiles damaged", _damaged_tiles, "its compressed image is damaged"),
    Case(
        "kind unknown", lambda b: b.put("x.fits", "light"), "is of the kind 'light', which is not"
    ),
    Case(
        "kind missing",
        _cards(*IMAGE_CARDS, "BZERO   = 32768"),
        "does not say its kind (IMAGETYP is missing or empty)",
    ),
    Case("kind empty", lambda b: b.put("x.fits", ""), "does not say its kind"),
    Case(
        "exposure missing",
        _without_exposure,
        "does not say its exposure (EXPTIME is missing)",
        0,
    ),
    Case(
        "exposure negative",
        lambda b: _dark(b, EXPTIME=-5.0),
        "its exposure is -5 s, which cannot",
        0,
    ),
    Case(
        "exposure text",
        lambda b: _dark(b, EXPTIME="long"),
        "its exposure (EXPTIME) is 'long', which could not be understood",
        0,
    ),
    Case(
        "time unreadable",
        lambda b: b.put("x.fits", DATE_OBS="noon"),
        "its time (DATE-OBS) is 'noon', which could not be understood",
        0,
    ),
    Case(
        "another shape",
        lambda b: b.put("x.fits", image=np.ones((16, 32), np.uint16)),
        "is 16 x 32 uint16 (rows x columns), the device's other frames are 32 x 32 uint16",
    ),
    Case(
        "another type",
        lambda b: b.put("x.fits", image=b.image().astype(np.float32)),
        "is 32 x 32 float32 (rows x columns), the device's other frames are 32 x 32 uint16",
    ),
    Case("no tiff", lambda b: b.write("x.tif", b"II*\0x"), "x.tif: is not a TIFF file that can"),
    Case(
        "tiff truncated", lambda b: _tiff(b, b.image(), cut=100), "x.tif: truncated: the image ends"
    ),
    Case(
        "tiff of colours",
        lambda b: _tiff(b, np.zeros((32, 32, 3), np.uint8), photometric="rgb"),
        "has 3 samples of type uint8 for each pixel; a raw frame has one number",
    ),
    Case(
        "tiff of pages",
        lambda b: _tiff(b, np.zeros((2, 32, 32), np.uint16), photometric="minisblack"),
        "x.tif: holds several images; write each to a file of its own",
    ),
    Case("no npy", lambda b: b.write("x.npy", b"abc"), "x.npy: is not a NumPy array file"),
    Case("pickle", lambda b: b.write("x.npy", pickle.dumps(Bait())), "is not a NumPy array file"),
    Case(
        "pickled array",
        lambda b: _npy(b, np.array([[Bait()]], object)),
        "x.npy: holds object values; a frame has plain numbers",
    ),
    Case("npy truncated", lambda b: _npy(b, b.image(), cut=9), "x.npy: truncated: the image ends"),
    Case("npy of one axis", lambda b: _npy(b, np.zeros(9)), "its array has shape (9,); a frame"),
    Case("raw without layout", lambda b: _raw(b, ""), "the recipe gives no layout for it"),
    Case(
        "raw of another size",
        lambda b: _raw(b, ", raw: {dtype: uint16, rows: 32, columns: 32}"),
        "has 100 bytes, frames.raw describes 2048",
    ),
    Case("name without match", _named, "stray.fits: does not match frames.pattern"),
    Case("manifest missing", lambda b: _manifest(b, None), "has no manifest 'list.csv'", 2),
    Case(
        "manifest without files",
        lambda b: _manifest(b, b"kind\nbias\n"),
        "list.csv:1: has no column file, path, filename, name; it has kind",
        2,
    ),
    Case(
        "manifest ragged",
        lambda b: _manifest(b, LISTED + b"x.fits\n"),
        "list.csv:6: has 1 cells, the first line has 2 columns",
        2,
    ),
    Case(
        "manifest twice",
        lambda b: _manifest(b, LISTED + b"b0.fits,dark\n"),
        "list.csv:6: names 'b0.fits' a second time",
        2,
    ),
    Case(
        "manifest in latin-1", lambda b: _manifest(b, b"file\n\xe4\n"), "not a CSV file in UTF-8", 2
    ),
    Case("manifest unclosed", lambda b: _manifest(b, b'file\n"a'), "is not a CSV file in UTF-8", 2),
    Case(
        "manifest names nothing",
        lambda b: _manifest(b, LISTED + b"../../etc/passwd,bias\n"),
        "../../etc/passwd: is named in the manifest and is not there",
        0,
    ),
    Case(
        "manifest forgets one",
        lambda b: (_manifest(b, LISTED), b.put("x.fits")),
        "x.fits: has no row in the manifest; it was left out",
    ),
    Case(
        "loop of links",
        lambda b: (b.frames / "loop").symlink_to(b.frames),
        "loop: is a link to a folder that was looked at already",
        0,
    ),
    Case(
        "named pipe",
        lambda b: os.mkfifo(b.frames / "x.fits"),
        "x.fits: is a pipe, socket or device and not a file; never opened",
        0,
    ),
    Case(
        "device",
        lambda b: (b.frames / "x.fits").symlink_to("/dev/zero"),
        "x.fits: is a pipe, socket or device and not a file; never opened",
        0,
    ),
    Case(
        "link to nothing",
        lambda b: (b.frames / "x.fits").symlink_to("nowhere"),
        "x.fits: cannot be read: no such file or directory",
        0,
    ),
    Case(
        "unknown ending",
        lambda b: b.write("x.xyz", b"x"),
        "x.xyz: has a name that no frame format has; passed over",
        0,
    ),
    Case("results beside frames", _results, "out: holds the results of a run, not raw frames", 0),
    Case("mixed serials", _serials, "mixed serials: 1 frame(s) of A1 lie among frames of B2"),
    Case(
        "no variance",
        lambda b: b.put("x.fits", image=np.full((32, 32), 7, np.uint16)),
        "zero variance: every sample looked at is 7 DN",
    ),
    Case(
        "same frame twice",
        lambda b: b.put("x.fits", image=b.image(seed=sum(b"b0.fits"))),
        "identical to b0.fits: the same frame under two names",
    ),
    Case(
        "bias with light",
        lambda b: b.put("x.fits", image=b.image(9000)),
        "kind contradicted: reads 8000 DN more than its fellow bias frames",
    ),
    Case("mirrored", _mirrored, "mirrored against its fellow dark frames, left to right"),
    Case("stuck bit", _stuck_bit, "stuck bits: bit 3 always 0 over"),
    Case(
        "section past the frame",
        lambda b: _outputs(b, '{a: {image: "[1:64,1:32]"}}'),
        "sensor.outputs.a.image: [1:64,1:32] leaves the frame, which has 32 x 32 pixels",
        3,
    ),
    Case(
        "sections that overlap",
        lambda b: _outputs(b, '{a: {image: "[1:20,1:32]"}, c: {image: "[10:32,1:32]"}}'),
        "overlap",
        3,
    ),
    Case(
        "section of the header missing",
        lambda b: (_outputs(b, "{a: {image: header DSEC1}}"), _stated(b, None)),
        "x.fits: its header has no DSEC1, from which the recipe takes sensor.outputs.a.image",
    ),
    Case(
        "section of the header garbled",
        lambda b: (_outputs(b, "{a: {image: header DSEC1}}"), _stated(b, "all of it")),
        "x.fits: DSEC1 is 'all of it', from which the recipe takes sensor.outputs.a.image; write",
    ),
    Case(
        "section of the header unlike the others",
        lambda b: (_outputs(b, "{a: {image: header DSEC1}}"), _stated(b, "[1:30,1:32]")),
        "is 32 x 32 uint16 (rows x columns), DSEC1 [1:30,1:32], the device's other frames are",
    ),
    Case(
        "section of the header past the frame",
        lambda b: (
            _outputs(b, "{a: {image: header DSEC1}}"),
            _emptied(b),
            [b.put(f"c{n}.fits", DSEC1="[1:32,1:99]") for n in range(3)],
        ),
        "sensor.outputs.a.image: [1:32,1:99] (from DSEC1) leaves the frame, which has 32 x 32",
        3,
    ),
    Case(
        "a single frame",
        lambda b: [(b.frames / f"b{n}.fits").unlink() for n in (1, 2, 3)],
        "a single bias frame shows no noise",
        0,
    ),
    Case(
        "hostile name",
        lambda b: b.put("\x1b]0;x\x07\x1b[31m.fits", "light"),
        "is of the kind 'light', which is not known",
    ),
]


def _text(content: str) -> Callable[[Bench], object]:
    return lambda bench: bench.recipe.write_text(content)


RECIPES = [
    Case("no such recipe", lambda b: b.recipe.unlink(), "recipe.yaml", 2),
    Case("recipe is a folder", lambda b: (b.recipe.unlink(), b.recipe.mkdir()), "recipe.yaml", 2),
    Case("empty", _text(""), "recipe.yaml:1  the file is empty", 2),
    Case("binary", lambda b: b.recipe.write_bytes(bytes(range(256))), "recipe.yaml", 2),
    Case("python object", _text("a: !!python/object:os.system ls"), "is a YAML tag", 2),
    Case("deep", _text("a: " + "[" * 4000), "nested deeper than", 2),
    Case(
        "billion laughs",
        _text("a: &a [x, x]\nb: &b [*a, *a]\nc: [*b, *b]\n"),
        "is a YAML anchor or alias",
        2,
    ),
    Case("unknown key", _text(RECIPE + "sensr: 1\n"), "sensr", 2),
    Case("key twice", _text(RECIPE + "name: b\n"), "recipe.yaml:4", 2),
    Case("no unit", _text(RECIPE.replace("15 um", "15")), "pixel_pitch", 2),
    Case("wrong unit", _text(RECIPE.replace("15 um", "15 s")), "pixel_pitch", 2),
    Case("no sensor", _text("name: a\n"), "sensor", 2),
    Case("unknown stage", _text(RECIPE + "stages: {shine: {}}\n"), "shine", 2),
    Case(
        "limit on nothing",
        _text(RECIPE + 'grades: {best: {shininess: "<= 5 electron"}}\n'),
        "shininess",
        2,
    ),
    Case("no pattern", lambda b: b.rules("{sorted_by: name}"), "needs 'pattern'", 2),
    Case(
        "broken pattern",
        lambda b: b.rules('{sorted_by: name, pattern: "(?P<kind>"}'),
        "not a regular expression",
        2,
    ),
    Case(
        "pattern that never ends",
        lambda b: b.rules('{sorted_by: name, pattern: "(?P<kind>([a-z]+)+)!"}'),
        "could take for ever",
        2,
    ),
    Case(
        "section of no keyword",
        lambda b: _outputs(b, "{a: {image: header of the frame}}"),
        "name one keyword of up to 8 letters and digits, as in header DSEC1",
        2,
    ),
    Case(
        "section backwards",
        lambda b: _outputs(b, '{a: {image: "[32:1,1:32]"}}'),
        "sections are not reversed",
        2,
    ),
]
