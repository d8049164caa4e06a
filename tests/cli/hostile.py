"""Inputs nobody should send: each is a change to a folder that builds, and the code it must end with."""

import io
import os
import pickle
import struct
import zlib
from dataclasses import dataclass, field

import numpy as np

from tests.cli.scene import JOB, straight_channel

LAYOUT, CARRIER, EXIT = "size_mm = [60.0, 40.0]", "radius_mm = 30.0", "exit_mm = [0.0, 0.0, -30.0]"


@dataclass(frozen=True)
class Bad:
    """A hostile case: its code, lines of job.toml replaced, files written over, and arguments instead of the usual."""

    code: str
    edits: tuple = ()
    files: dict = field(default_factory=dict)
    arguments: tuple = ("build", "job.toml")

    def prepare(self, folder):
        text = JOB
        for old, new in self.edits:
            assert old in text, old
            text = text.replace(old, new, 1)
        (folder / "job.toml").write_text(text)
        for name, content in self.files.items():
            content(folder / name) if callable(content) else (folder / name).write_bytes(content)


def npy(array):
    """The bytes of a .npy file."""
    stream = io.BytesIO()
    np.save(stream, array)
    return stream.getvalue()


def npy_claiming(shape, dtype="<f8"):
    """A .npy file whose header promises `shape` and whose data is 8 bytes."""
    header = f"{{'descr': '{dtype}', 'fortran_order': False, 'shape': {shape}, }}".encode().ljust(117) + b"\n"
    return b"\x93NUMPY\x01\x00" + struct.pack("<H", len(header)) + header + b"\0" * 8


def png(width, height, colour, rows, depth=8):
    """A PNG file with the given header and filtered `rows`."""

    def chunk(kind, data):
        return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))

    header = struct.pack(">IIBBBBB", width, height, depth, colour, 0, 0, 0)
    return b"\x89PNG\r\n\x1a\n" + chunk(b"IHDR", header) + chunk(b"IDAT", zlib.compress(rows)) + chunk(b"IEND", b"")


def spoiled(value):
    """The straight channel with one value replaced."""
    array = straight_channel()
    array[3, 4] = value
    return npy(array)


class Payload:
    """Leaves a trace when unpickled."""

    def __reduce__(self):
        return (os.mkdir, ("trace-of-a-pickle",))


def pickled():
    """A .npy file of objects that would run code."""
    array = np.empty((10, 10), dtype=object)
    array[:] = Payload()
    stream = io.BytesIO()
    np.lib.format.write_array(stream, array, allow_pickle=True)
    return stream.getvalue()


def image(code, name, content):
    return Bad(code, (("density.npy", name),), {name: content})


def setting(code, old, new):
    return Bad(code, ((old, new),))


def more(code, lines):
    return Bad(code, (("[carrier]", f"{lines}\n[carrier]"),))


def density(code, array, *edits):
    return Bad(code, edits, {"density.npy": npy(array)})


def two_channels():
    value = np.zeros((80, 120))
    value[15:25] = value[55:65] = 1.0
    return value


def specks():
    """Five dots far smaller than any channel."""
    value = np.zeros((80, 120))
    for row, column in ((10, 10), (30, 80), (50, 20), (60, 100), (70, 60)):
        value[row : row + 2, column : column + 2] = 1.0
    return value


def make_pipe(path):
    path.unlink(missing_ok=True)
    os.mkfifo(path)


def make_folder(path):
    path.unlink(missing_ok=True)
    path.mkdir()


FILES = [
    Bad("job-missing", arguments=("build", "nothing.toml")),
    Bad("job-missing", arguments=("build", "n" * 400)),
    Bad("job-unreadable", arguments=("build", ".")),
    Bad("job-too-large", files={"job.toml": b"#" * 1_000_001}),
    Bad("toml-not-text", files={"job.toml": npy(np.zeros((9, 9)) + 0.5)}),
    Bad("toml-not-text", files={"job.toml": "name = 'Kühlung'".encode("latin-1")}),
    Bad("toml-syntax", files={"job.toml": b"\x00" * 100}),
    Bad("toml-syntax", files={"job.toml": pickle.dumps([1])[:2].decode("latin-1").encode()}),
    Bad("toml-too-deep", files={"job.toml": b"a." * 490_000 + b"a = 1"}),
    Bad("toml-too-deep", files={"job.toml": b"a = " + b"[" * 900_000}),
    Bad("setting-missing", files={"job.toml": b""}),
]

IMAGES = [
    setting("image-missing", "density.npy", "none.npy"),
    setting("image-missing", "density.npy", "../../../../none.npy"),
    Bad("image-is-folder", files={"density.npy": make_folder}),
    image("image-empty", "density.npy", b""),
    image("image-not-its-kind", "density.npy", b"name = 1\n"),
    image("image-not-its-kind", "density.npy", png(60, 40, 0, b"\0" + b"\x10" * 60)),
    image("image-not-its-kind", "density.png", npy(straight_channel())),
    image("image-pickled", "density.npy", pickled()),
    image("image-damaged", "density.npy", npy(straight_channel())[:-100]),
    image("image-damaged", "density.npy", b"\x93NUMPY\x01\x00\x76\x00" + b"{" * 118),
    image("image-damaged", "density.png", png(60, 40, 0, (b"\0" + b"\x10" * 60) * 3)),
    image("image-too-large", "density.npy", npy_claiming((1_000_000, 1_000_000))),
    image("image-too-large", "density.png", png(2**31 - 1, 2**31 - 1, 0, b"\0" * 1000)),
    image("image-not-flat", "density.npy", npy(np.zeros((9, 9, 9)))),
    image("image-too-small", "density.npy", npy(np.zeros((3, 3)))),
    image("image-not-numbers", "density.npy", npy(np.zeros((9, 9), dtype=complex))),
    image("image-integers", "density.npy", npy(np.arange(81).reshape(9, 9) * 3)),
    image("image-not-finite", "density.npy", spoiled(np.nan)),
    image("image-not-finite", "density.npy", spoiled(np.inf)),
    image("image-out-of-range", "density.npy", spoiled(-0.5)),
    image("image-out-of-range", "density.npy", spoiled(255.0)),
    image("image-constant", "density.npy", npy(np.full((40, 60), 0.7))),
    image("image-coloured", "density.png", png(60, 40, 2, (b"\0" + b"\x10\x80\xf0" * 60) * 40)),
    image("image-png-kind", "density.png", png(60, 40, 3, (b"\0" + b"\x10" * 60) * 40)),
    image("image-transparent", "density.png", png(60, 40, 4, (b"\0" + b"\x10\x80" * 60) * 40)),
    image("image-damaged", "density.tif", b"II*\0"),
    image("image-damaged", "density.npz", b"PK\x03\x04"),
    image("image-format-unknown", "density.jpg", b"\xff\xd8\xff"),
]

SETTINGS = [
    setting("setting-unknown", CARRIER, "radius = 30.0"),
    setting("setting-unknown", "[carrier]", "[carriers]"),
    setting("setting-type", CARRIER, 'radius_mm = "30"'),
    setting("setting-type", CARRIER, "radius_mm = true"),
    setting("setting-not-finite", CARRIER, "radius_mm = nan"),
    setting("setting-not-finite", CARRIER, "radius_mm = 1" + "0" * 400),
    setting("setting-range", LAYOUT, "size_mm = [-60.0, -40.0]"),
    setting("setting-choice", "toward-axis", "towards-axis"),
    setting("setting-text", "density.npy", "density\\u0000.npy"),
    setting("setting-missing", LAYOUT, ""),
    setting("setting-missing", "[carrier]", "[section]"),
    setting("job-name", '"lamp"', '"../../lamp"'),
    setting("not-available", '"cylinder"', '"freeform"'),
    more("not-available", '[moulding]\npolymer = "PP"'),
    more("coolant-drive", "[coolant]\nflow_l_min = 6\ndrop_bar = 1"),
    more("fluid-unknown", '[coolant]\nflow_l_min = 6\nfluid = "brine"'),
    more("velocity-absurd", "[coolant]\nflow_l_min = 60\npressure_bar = 100"),
    more("coolant-freezes", "[coolant]\nflow_l_min = 6\ninlet_c = -2"),
    more("pump-unreadable", '[coolant]\npump = "none.csv"'),
    more("setting-zero-direction", "[print]\nbuild_direction = [0, 0, 0]"),
    more("profile-unknown", '[print]\nprocess = "steel"'),
    more("profile-missing", '[print]\nprocess = "../steel.toml"'),
    more("setting-order", "[section]\nbore_range_mm = [8, 3]"),
    setting("depth-choice", "depth_mm = 9.0", ""),
    setting("depth-choice", "depth_mm = 9.0", "depth_mm = 9.0\nwall_to_face_mm = 3.0"),
    setting("port-none-in", '"in"', '"out"'),
    setting("port-none-out", '"out"', '"access"'),
    setting("port-outside", "[60.0, 20.0]", "[60.5, 20.0]"),
    setting("port-name-twice", '"return"', '"feed"'),
    setting("port-place-twice", "[60.0, 20.0]", "[0.0, 20.0]"),
    more("face-part-and-port", '[blank]\npart_faces = ["carrier", "foot"]'),
    more("part-faces-carrier", '[blank]\npart_faces = ["top"]'),
]

GEOMETRY = [
    setting("aspect-mismatch", LAYOUT, "size_mm = [60.0, 60.0]"),
    setting("aspect-mismatch", LAYOUT, "size_mm = [60.0, 41.0]"),
    density("level-empty", straight_channel() * 0.4),
    density("port-off-channel", specks()),
    density("level-full", 0.6 + 0.4 * straight_channel()),
    setting("keep-area-missed", LAYOUT, LAYOUT + '\nlevel = "keep-area"\narea_ratio = 0.9'),
    setting("port-off-channel", "[60.0, 20.0]", "[60.0, 39.0]"),
    setting("ports-on-one-node", "[60.0, 20.0]", "[0.5, 20.5]"),
    density(
        "piece-without-in-or-out",
        two_channels(),
        ("at_mm = [0.0, 20.0]", "at_mm = [0.0, 10.0]"),
        ("at_mm = [60.0, 20.0]", "at_mm = [60.0, 30.0]"),
    ),
    setting("depth-past-axis", "depth_mm = 9.0", "depth_mm = 29.0"),
    setting("depth-past-axis", "depth_mm = 9.0", "depth_mm = 300.0"),
    setting("sheet-wraps-past-itself", CARRIER, "radius_mm = 18.0"),
    setting("blank-past-apex", 'kind = "cylinder"', 'kind = "cone"\nhalf_angle_deg = 79.0\nmap = "polar"'),
    setting(
        "sheet-past-apex",
        'kind = "cylinder"\nradius_mm = 30.0',
        'kind = "cone"\nradius_mm = 20.0\nhalf_angle_deg = 70.0\nmap = "polar"',
    ),
    more("flange-misfit", "[blank]\nflange = { radius_mm = 29, height_mm = 5 }"),
    more("flange-misfit", "[blank]\nflange = { radius_mm = 49, height_mm = 50 }"),
    more("bore-range-empty", "[service]\nsmallest_bore_mm = 20.0"),
    more("blank-not-a-body", "[blank]\nthickness_mm = 30.0"),
    setting("blank-thickness-missing", "toward-axis", "away-from-axis"),
    more("blank-inside-carrier", '[blank]\nkind = "cylinder"\nradius_mm = 20\nz_mm = [-40, 40]'),
    more("blank-misses-carrier", '[blank]\nkind = "cylinder"\nradius_mm = 30\nz_mm = [100, 140]'),
    more("blank-misses-carrier", '[blank]\nkind = "box"\nmin_mm = [50, 50, 50]\nmax_mm = [60, 60, 60]'),
    more("blank-face-unknown", '[blank]\nport_faces = ["inner"]'),
    more("blank-no-port-face", "[blank]\nport_faces = []"),
    more("blank-stock-refused", "[blank]\nstock_mm = { carrier = 1.0 }"),
    more("hole-misses-body", "[[hole]]\nat_mm = [500, 0, 0]\naxis = [0, 0, 1]\ndiameter_mm = 5"),
    setting("exit-off-port-face", "at_mm = [0.0, 20.0]", "at_mm = [0.0, 20.0]\nexit_mm = [0.0, 0.0, 0.0]"),
    setting("exit-without-wall", "at_mm = [0.0, 20.0]", "at_mm = [0.0, 20.0]\nexit_mm = [29.0, 0.0, -30.0]"),
    setting("leave-into-metal", "at_mm = [0.0, 20.0]", f"at_mm = [0.0, 20.0]\n{EXIT}\nleave = [0, 0, 1]"),
    Bad(
        "exits-too-near",
        (
            ("at_mm = [0.0, 20.0]", f"at_mm = [0.0, 20.0]\n{EXIT}"),
            ("at_mm = [60.0, 20.0]", "at_mm = [60.0, 20.0]\nexit_mm = [1.0, 0.0, -30.0]"),
        ),
    ),
    more("lead-blocked", "[[hole]]\nat_mm = [0, 0, -30]\naxis = [0, 0, 1]\ndiameter_mm = 50\ndepth_mm = 5"),
    more("no-room-for-smallest-bore", "[service]\nwall_face_mm = 12.0"),
]

OUTPUT = [
    Bad("output-is-a-file", arguments=("build", "job.toml", "--out", "density.npy")),
    Bad("output-parent-missing", arguments=("build", "job.toml", "--out", "no/such/folder")),
    Bad("output-parent-missing", arguments=("build", "job.toml", "--out", "density.npy/below")),
    Bad("output-not-empty", arguments=("build", "job.toml", "--out", ".")),
    Bad("output-unwritable", arguments=("build", "job.toml", "--out", "x" * 300)),
    Bad("output-unwritable", arguments=("build", "job.toml", "--out", "nul\0byte")),
    Bad("output-exists", arguments=("start", "density.npy")),
    Bad("image-missing", arguments=("start", "none.npy", "--out", "new.toml")),
    Bad("image-format-unknown", arguments=("start", "job.toml", "--out", "new.toml")),
    Bad("not-available", arguments=("check", "insert.stl")),
    Bad("code-unknown", arguments=("explain", "no-such-code")),
]

if hasattr(os, "mkfifo"):
    IMAGES.append(Bad("image-unreadable", files={"density.npy": make_pipe}))
    FILES.append(Bad("job-unreadable", files={"job.toml": make_pipe}))

ALL = FILES + IMAGES + SETTINGS + GEOMETRY + OUTPUT
