#!/usr/bin/env python3
"""Fetch a measured ground-vehicle run and write it as a CSV file.

The run is the bundled data file ``Data/Plaza2_.mat`` of the general
factor-graph package ``gtsam``, version 4.3.0, fetched from PyPI by name and
pinned version.  Nothing of the package is run or imported: its wheel is opened
as a zip file, and the one data file is read by the small, strict MAT v5 reader
below.  The data is fetched when needed and is not to be committed.

Credit.  As stated in the package: the distribution is "gtsam", by Frank
Dellaert et al., under the "Simplified BSD license"; the data file's own header
says it was created on 20 June 2013.  The wheel itself says nothing more about
where the data comes from.  From memory, not checked here: the "Plaza 2" run
belongs to a set of runs of an autonomous lawn mower with range-only radio
nodes, published by J. Djugash, B. Hamner and S. Roth ("Navigating with Ranging
Radios: Five Data Sets with Ground Truth", Journal of Field Robotics, 2009),
where the measured poses come from a satellite/inertial positioning unit.

Output: OUT/plaza2.csv, header ``t_s,x_m,y_m,heading_rad``, one row for each
row of the file's ``GT`` array (4091 x 4: stamp, x, y, heading).  The first
stamp is subtracted from all stamps; everything else is written as it stands,
each number in the shortest form that reads back to the same double.  The
heading is the file's own: wrapped to (-pi, pi], and turned by pi against the
course of forward motion.

Needs Python 3.9 or later with pip; standard library only.
Exit status: 0 on success, 1 on any failure.
"""

import argparse
import csv
import hashlib
import io
import math
import os
import struct
import subprocess
import sys
import tempfile
import zipfile
import zlib

PACKAGE = "gtsam"
VERSION = "4.3.0"
MEMBER = "gtsam/Data/Plaza2_.mat"
MEMBER_BYTES = 296733
MEMBER_SHA256 = "72f0abe0fea2050eb5ee1cffc8c43823266a35785b7cdecac4ec5eae727561a2"
ARRAY = "GT"
ROWS = 4091
COLS = 4
CSV_NAME = "plaza2.csv"
HEADER = ["t_s", "x_m", "y_m", "heading_rad"]
INFLATED_LIMIT = 16 * 1024 * 1024

# MAT v5 data types.
MI_INT8, MI_INT32, MI_UINT32, MI_DOUBLE = 1, 5, 6, 9
MI_MATRIX, MI_COMPRESSED = 14, 15
MX_DOUBLE_CLASS = 6
FLAG_COMPLEX = 0x0800


class Failure(Exception):
    """Anything that must end the run with a message and a non-zero status."""


# ---------------------------------------------------------------- MAT v5 --

class Reader:
    """Reads tagged MAT v5 data elements from one buffer, checking each size."""

    def __init__(self, data, endian):
        self.data = data
        self.endian = endian
        self.pos = 0

    def done(self):
        return self.pos == len(self.data)

    def take(self, count):
        end = self.pos + count
        if count < 0 or end > len(self.data):
            raise Failure("MAT file: an element runs past the end of its data")
        piece = self.data[self.pos:end]
        self.pos = end
        return piece

    def element(self, padded=True):
        """Returns (type, payload).  Top-level compressed elements are unpadded."""
        kind, size = struct.unpack(self.endian + "II", self.take(8))
        small = kind >> 16
        if small:
            # Small element: type and size share one word, payload in the next.
            if small > 4:
                raise Failure("MAT file: a small element claims %d bytes" % small)
            return kind & 0xFFFF, self.data[self.pos - 4:self.pos - 4 + small]
        payload = self.take(size)
        if padded and kind != MI_COMPRESSED:
            self.take(-size % 8)
        return kind, payload


def inflate(data):
    engine = zlib.decompressobj()
    try:
        out = engine.decompress(data, INFLATED_LIMIT)
    except zlib.error as err:
        raise Failure("MAT file: bad compressed element: %s" % err)
    if not engine.eof or engine.unused_data:
        raise Failure("MAT file: a compressed element is cut short, too large or has a tail")
    return out


def parse_matrix(body, endian):
    """Returns (name, rows, columns, column-major list of doubles)."""
    reader = Reader(body, endian)

    kind, payload = reader.element()
    if kind != MI_UINT32 or len(payload) != 8:
        raise Failure("MAT file: bad array flags")
    flags = struct.unpack(endian + "II", payload)[0]

    kind, payload = reader.element()
    if kind != MI_INT32 or len(payload) != 8:
        raise Failure("MAT file: an array is not two-dimensional")
    rows, cols = struct.unpack(endian + "ii", payload)
    if rows < 0 or cols < 0:
        raise Failure("MAT file: an array has a negative size")

    kind, payload = reader.element()
    if kind != MI_INT8:
        raise Failure("MAT file: bad array name")
    try:
        name = payload.decode("ascii")
    except UnicodeDecodeError:
        raise Failure("MAT file: an array name is not ASCII")

    if flags & 0xFF != MX_DOUBLE_CLASS or flags & FLAG_COMPLEX:
        raise Failure("MAT file: array %r is not a real array of doubles" % name)
    kind, payload = reader.element()
    if kind != MI_DOUBLE:
        raise Failure("MAT file: array %r is not stored as doubles (type %d)" % (name, kind))
    if len(payload) != 8 * rows * cols:
        raise Failure("MAT file: array %r holds %d bytes, not %d x %d doubles"
                      % (name, len(payload), rows, cols))
    if not reader.done():
        raise Failure("MAT file: array %r has unread data" % name)
    return name, rows, cols, list(struct.unpack("%s%dd" % (endian, rows * cols), payload))


def parse_mat(data):
    """Returns {name: (rows, columns, column-major doubles)}."""
    if len(data) < 128 or not data.startswith(b"MATLAB 5.0 MAT-file"):
        raise Failure("MAT file: no v5 header")
    mark = data[126:128]
    if mark == b"IM":
        endian = "<"
    elif mark == b"MI":
        endian = ">"
    else:
        raise Failure("MAT file: bad byte-order mark %r" % mark)
    version = struct.unpack(endian + "H", data[124:126])[0]
    if version != 0x0100:
        raise Failure("MAT file: version 0x%04x, not 0x0100" % version)

    arrays = {}
    reader = Reader(data[128:], endian)
    while not reader.done():
        kind, payload = reader.element()
        if kind == MI_COMPRESSED:
            inner = Reader(inflate(payload), endian)
            kind, payload = inner.element(padded=False)
            if not inner.done():
                raise Failure("MAT file: a compressed element holds more than one array")
        if kind != MI_MATRIX:
            raise Failure("MAT file: top-level element of type %d, not an array" % kind)
        name, rows, cols, values = parse_matrix(payload, endian)
        if name in arrays:
            raise Failure("MAT file: array %r comes twice" % name)
        arrays[name] = (rows, cols, values)
    return arrays


# ------------------------------------------------------------------ fetch --

# Tried in turn: the running Python's own wheel, then fixed tags, so that the
# data can be had where no wheel fits the running Python.  The wheel is only
# unzipped, so its tags do not matter; the data file's hash is pinned.
TAGS = [
    [],
    ["--implementation", "cp", "--python-version", "3.11", "--abi", "cp311",
     "--platform", "manylinux2014_x86_64", "--platform", "manylinux_2_17_x86_64"],
]


def fetch_wheel(directory):
    last = ""
    for tags in TAGS:
        command = [sys.executable, "-m", "pip", "download", "--quiet",
                   "--disable-pip-version-check", "--no-input", "--no-deps",
                   "--only-binary=:all:", *tags, "-d", directory,
                   "%s==%s" % (PACKAGE, VERSION)]
        try:
            done = subprocess.run(command, stdout=subprocess.PIPE,
                                  stderr=subprocess.STDOUT, timeout=600)
        except (OSError, subprocess.TimeoutExpired) as err:
            last = str(err)
            continue
        if done.returncode == 0:
            wheels = [n for n in sorted(os.listdir(directory)) if n.endswith(".whl")]
            if len(wheels) != 1:
                raise Failure("pip left %d wheels, not one" % len(wheels))
            return os.path.join(directory, wheels[0])
        last = done.stdout.decode("utf-8", "replace").strip()
    raise Failure("pip could not download %s==%s:\n%s" % (PACKAGE, VERSION, last))


def read_member(wheel):
    try:
        with zipfile.ZipFile(wheel) as archive:
            try:
                info = archive.getinfo(MEMBER)
            except KeyError:
                raise Failure("the wheel has no %s" % MEMBER)
            if info.file_size != MEMBER_BYTES:
                raise Failure("%s has %d bytes, not %d" % (MEMBER, info.file_size, MEMBER_BYTES))
            data = archive.read(info)
    except (zipfile.BadZipFile, OSError, zlib.error) as err:
        raise Failure("cannot read the wheel: %s" % err)
    digest = hashlib.sha256(data).hexdigest()
    if digest != MEMBER_SHA256:
        raise Failure("%s has SHA-256 %s, not the pinned %s" % (MEMBER, digest, MEMBER_SHA256))
    return data


# ----------------------------------------------------------------- output --

def ground_truth(data):
    arrays = parse_mat(data)
    if ARRAY not in arrays:
        raise Failure("the file has no array %r, only %s" % (ARRAY, ", ".join(sorted(arrays))))
    rows, cols, flat = arrays[ARRAY]
    if (rows, cols) != (ROWS, COLS):
        raise Failure("array %r is %d x %d, not %d x %d" % (ARRAY, rows, cols, ROWS, COLS))
    if not all(map(math.isfinite, flat)):
        raise Failure("array %r holds a number that is not finite" % ARRAY)
    stamp, x, y, heading = (flat[k * rows:(k + 1) * rows] for k in range(COLS))
    if any(b <= a for a, b in zip(stamp, stamp[1:])):
        raise Failure("the stamps do not grow throughout")
    if any(abs(h) > math.pi for h in heading):
        raise Failure("a heading is outside -pi to pi")
    return [(t - stamp[0], *rest) for t, *rest in zip(stamp, x, y, heading)]


def write_csv(rows, directory):
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(HEADER)
    writer.writerows([repr(v) for v in row] for row in rows)
    data = text.getvalue().encode("ascii")
    path = os.path.join(directory, CSV_NAME)
    part = path + ".part"
    try:
        os.makedirs(directory, exist_ok=True)
        with open(part, "wb") as out:
            out.write(data)
        os.replace(part, path)
    except OSError as err:
        raise Failure("cannot write %s: %s" % (path, err))
    return path, data


def report(rows, path, data):
    steps = [b[0] - a[0] for a, b in zip(rows, rows[1:])]
    moves = [math.hypot(b[1] - a[1], b[2] - a[2]) for a, b in zip(rows, rows[1:])]
    odd = sum(not 0.09 <= s <= 0.11 for s in steps)
    print("wrote %s: %d rows, %d bytes, SHA-256 %s"
          % (path, len(rows), len(data), hashlib.sha256(data).hexdigest()))
    print("duration %.3f s, median step %.4f s, shortest %.4f s, longest %.4f s, "
          "%d steps outside 0.09 to 0.11 s"
          % (rows[-1][0], sorted(steps)[len(steps) // 2], min(steps), max(steps), odd))
    print("path length %.2f m, x %.2f to %.2f m, y %.2f to %.2f m"
          % (math.fsum(moves), min(r[1] for r in rows), max(r[1] for r in rows),
             min(r[2] for r in rows), max(r[2] for r in rows)))


def main():
    parser = argparse.ArgumentParser(
        description="Fetch the Plaza2 measured run (%s %s) and write %s."
                    % (PACKAGE, VERSION, CSV_NAME))
    parser.add_argument("--out", required=True, metavar="DIR",
                        help="directory to write %s into (made if missing)" % CSV_NAME)
    args = parser.parse_args()
    try:
        with tempfile.TemporaryDirectory(prefix="measured-log-") as temp:
            data = read_member(fetch_wheel(temp))
        rows = ground_truth(data)
        report(rows, *write_csv(rows, args.out))
    except Failure as err:
        print("fetch_plaza2: %s" % err, file=sys.stderr)
        return 1
    return 0


if __name__ == "__main__":
    sys.exit(main())
