"""Checks trackhold_client.py against the golden datagrams and against a stand-in daemon on the loopback address.

    python3 test_vectors.py

SPDX-License-Identifier: MIT
"""

import hashlib
import json
import math
import random
import socket
import struct
import threading
import time
import unittest
from pathlib import Path

import trackhold_client as client

VECTORS = Path(__file__).resolve().parents[2] / "proto" / "vectors"
NUMBERS = ("session", "sequence", "stamp_ns")


def golden():
    """Every golden datagram: name, bytes, and the fields of its JSON form."""
    for path in sorted(VECTORS.glob("*.json")):
        yield path.stem, path.with_suffix(".bin").read_bytes(), json.loads(path.read_text("utf-8"))


class Vectors(unittest.TestCase):
    def test_every_golden_datagram_reads_and_writes(self):
        kinds = set()
        for name, data, fields in golden():
            with self.subTest(name):
                kind = fields.pop("kind")
                numbers = [fields.pop(number) for number in NUMBERS]
                self.assertEqual(client.decode(data), (kind, *numbers, fields))
                self.assertEqual(client.encode(kind, fields, *numbers), data)
                self.assertEqual(client.decode(data + bytes(client.TAG_BYTES)).fields, fields)
                kinds.add(kind)
        self.assertEqual(kinds, set(client.KINDS))

    def test_cut_altered_and_random_bytes_raise_one_error_only(self):
        draw = random.Random(1)
        for _, data, _ in golden():
            for length in range(len(data)):
                with self.assertRaises(client.ProtocolError):
                    client.decode(data[:length])
            for _ in range(300):
                altered = bytearray(data)
                for _ in range(draw.randint(1, 4)):
                    altered[draw.randrange(len(altered))] = draw.randrange(256)
                try:
                    client.decode(bytes(altered))
                except client.ProtocolError as error:
                    self.assertTrue(str(error))
        for _ in range(1000):
            payload = draw.randbytes(draw.randrange(1161)) if hasattr(draw, "randbytes") else b""
            kind = draw.choice(list(client.NAMES))
            head = client.HEADER.pack(client.MAGIC, 1, kind, len(payload), 1, 2, 3, 0, 0)
            try:
                client.decode(head + payload)
            except client.ProtocolError:
                pass

    def test_what_is_not_a_message_is_refused_by_its_field(self):
        stop = {"stop": "emergency"}
        subscribe = {"want": 4, "lease_ms": 1000}
        cases = [
            ("jump", {}, "jump"),
            ("stop", {}, "stop"),
            ("stop", {"stop": "hard"}, "stop"),
            ("stop", {**stop, "colour": 1}, "colour"),
            ("subscribe", {**subscribe, "want": -1}, "want"),
            ("subscribe", {**subscribe, "lease_ms": 1.5}, "lease_ms"),
            ("journal-part", {"first": 0, "entries": 1, "part": 0, "parts": 1, "bytes": "00" * 1101}, "bytes"),
        ]
        for kind, fields, named in cases:
            with self.assertRaisesRegex(client.ProtocolError, named):
                client.encode(kind, fields, 1, 2, 3)
        pose = dict.fromkeys(("x_m", "y_m", "heading_rad", "position_sd_m", "heading_sd_rad"), 0.0)
        for field in pose:
            for wrong in (math.nan, math.inf, -math.inf):
                with self.assertRaisesRegex(client.ProtocolError, field):
                    client.encode("pose", {"measured_ns": 0, **pose, field: wrong}, 1, 2, 3)
        with self.assertRaisesRegex(client.ProtocolError, "session"):
            client.encode("stop", stop, 1 << 64, 2, 3)
        data = bytearray((VECTORS / "pose.bin").read_bytes())
        struct.pack_into("<d", data, 48, math.nan)
        with self.assertRaisesRegex(client.ProtocolError, "x_m"):
            client.decode(bytes(data))


class TrackLog(unittest.TestCase):
    """The journal frame and the track log as PROTOCOL.md describes them, read without any code of the daemon's."""

    def crc32c(self, data):
        crc = 0xFFFFFFFF
        for byte in data:
            crc ^= byte
            for _ in range(8):
                crc = crc >> 1 ^ (0x82F63B78 if crc & 1 else 0)
        return crc ^ 0xFFFFFFFF

    def frames(self, data, at):
        while at < len(data):
            number, _, length, crc = struct.unpack_from("<QQII", data, at)
            body = data[at + 24:at + 24 + length]
            self.assertEqual(len(body), length)
            self.assertEqual(self.crc32c(data[at:at + 20] + body), crc)
            yield at, number, body
            at += 24 + length

    def test_the_golden_log(self):
        self.assertEqual(self.crc32c(b"123456789"), 0xE3069283)
        data = (VECTORS / "track-log.bin").read_bytes()
        self.assertEqual(data[:8], b"TRKHLOG1")
        frames = list(self.frames(data, 8))
        self.assertEqual([number for _, number, _ in frames], [0, 2**64 - 1, 42, 2**64 - 1])
        self.assertEqual([body[0] for _, _, body in frames], [0, 13, 1, 14])
        self.assertEqual(struct.unpack("<IQQ", frames[1][2]), (13, 1, 41))
        at, _, end = frames[-1]
        self.assertEqual(end[4:12], struct.pack("<Q", 2))
        self.assertEqual(end[12:], hashlib.sha256(data[:at]).digest())

    def test_the_golden_frames(self):
        data = (VECTORS / "journal-frames.bin").read_bytes()
        self.assertEqual(sorted({body[0] for _, _, body in self.frames(data, 0)}), list(range(18)))


class CompactPlan(unittest.TestCase):
    def test_it_is_what_the_daemon_reads(self):
        points = [(0.0, 1.0, 2.0, 0.5, 1.5, 0.25), (1.0, 2.0, 2.5, 0.5, 1.5, -0.125)]
        plan = client.compact_plan("S\u00fcd", 7, points, True, 2.5, speed=True, turn_rate=True)
        # The same plan, packed by the core: see its test of the same digest.
        self.assertEqual(hashlib.sha256(plan).hexdigest(), "bcd55aa9bed5d5292a8d3824205132346f7331f4c4539161682f6b6556a7c77c")
        self.assertEqual(len(client.compact_plan("a", 1, [(0.0, 0.0, 0.0, 0.0), (1.0, 1.0, 0.0, 0.0)])), 144 + 64)

    def test_what_is_out_of_range_is_named(self):
        good = [(0.0, 0.0, 0.0, 0.0), (1.0, 1.0, 0.0, 0.0)]
        for args, named in [
            (("", 1, good), "plan_id"), (("x" * 65, 1, good), "plan_id"), (("a", -1, good), "revision"),
            (("a", 1, good[:1]), "points"), (("a", 1, [good[0], (1.0, math.nan, 0.0, 0.0)]), r"points\[1\]"),
            (("a", 1, good, False, None, True), r"points\[0\]"), (("a", 1, good, False, math.inf), "continues_at_s"),
        ]:
            with self.assertRaisesRegex(client.ProtocolError, named):
                client.compact_plan(*args)


class Daemon:
    """A stand-in: hands every message to `answer`, which gives the fields to send back, or None."""

    def __init__(self, answer):
        self.got = []
        self._answer = answer
        self._socket = socket.socket(socket.AF_INET, socket.SOCK_DGRAM)
        self._socket.bind(("127.0.0.1", 0))
        self._socket.settimeout(0.05)
        self.address = self._socket.getsockname()
        self._stop = threading.Event()
        self._thread = threading.Thread(target=self._run)

    def __enter__(self):
        self._thread.start()
        return self

    def __exit__(self, *_):
        self._stop.set()
        self._thread.join()
        self._socket.close()

    def send(self, kind, fields, address):
        self._socket.sendto(client.encode(kind, fields, 99, 1, 0), address)

    def _run(self):
        while not self._stop.is_set():
            try:
                data, address = self._socket.recvfrom(2000)
            except socket.timeout:
                continue
            message = client.decode(data)
            self.got.append(message)
            for kind, fields in self._answer(self, message, address) or ():
                self.send(kind, fields, address)


def ack(message, accepted=1, text="", plan="00" * 32, **other):
    fields = {
        "order_session": message.session, "order_sequence": message.sequence,
        "order_kind": client.KINDS[message.kind][0], "accepted": accepted, "plan": plan, "text": text,
    }
    return "ack", {**fields, **other}


class Clients(unittest.TestCase):
    def test_an_order_is_repeated_under_its_number_until_its_own_ack_comes(self):
        def answer(daemon, message, _):
            # Lost twice; then acks of somebody else's order and of an earlier one of ours come first.
            if len(daemon.got) < 3:
                return None
            return [
                ack(message, accepted=0, order_session=message.session ^ 1),
                ack(message, accepted=0, order_sequence=message.sequence - 1),
                ack(message),
            ]

        with Daemon(answer) as daemon, client.Operator(daemon.address) as operator:
            operator.stop()
            got = daemon.got
        self.assertEqual(len({(message.session, message.sequence) for message in got[:3]}), 1)
        self.assertEqual({message.fields["stop"] for message in got}, {"emergency"})

    def test_each_order_takes_a_new_number_and_each_life_a_new_session(self):
        sessions = set()
        with Daemon(lambda _, message, __: [ack(message)]) as daemon:
            for _ in range(2):
                with client.Operator(daemon.address) as operator:
                    operator.stop("controlled")
                    operator.reset()
                    operator.cap(0.4)
                    operator.tune("kanayama", k_y=9.0)
                    sessions.add(operator.session)
            got = daemon.got
        self.assertEqual(len(sessions), 2)
        self.assertEqual([message.kind for message in got], ["stop", "reset", "cap", "tune"] * 2)
        self.assertLess(got[0].sequence, got[1].sequence)
        self.assertEqual(got[2].fields, {"share": 0.4})
        self.assertEqual(json.loads(got[3].fields["law"]), {"name": "kanayama", "gains": {"k_y": 9.0}})
        with Daemon(lambda *_: None) as daemon, client.Operator(daemon.address) as operator:
            for wrong in (0.04, 1.1, math.nan):
                with self.assertRaisesRegex(client.ProtocolError, "share"):
                    operator.cap(wrong)

    def test_a_start_quotes_the_status_and_a_refusal_is_told(self):
        status = json.loads((VECTORS / "status.json").read_text("utf-8"))
        status = {name: value for name, value in status.items() if name not in ("kind", *NUMBERS)}

        def answer(_, message, __):
            if message.kind == "status-request":
                return [("status", status)]
            return [ack(message, accepted=0, text="größer als 0,5 rad")]

        with Daemon(answer) as daemon, client.Operator(daemon.address) as operator:
            self.assertEqual(operator.status(), status)
            with self.assertRaisesRegex(client.Refused, "größer als 0,5 rad"):
                operator.start("ab" * 32, at="plan-time", plan_time_ns=5)
            start = daemon.got[-1].fields
        self.assertEqual(start, {
            "boot": status["boot"], "plan": "ab" * 32, "start_number": 2**64 - 1,
            "at": "plan-time", "plan_time_ns": 5,
        })

    def test_nobody_there_is_told_in_time(self):
        with Daemon(lambda *_: None) as daemon:
            address = daemon.address
        with client.Operator(address) as operator:
            begin = time.monotonic()
            with self.assertRaisesRegex(client.NoAnswer, "reset, sent 20 times"):
                operator.reset()
            with self.assertRaises(client.NoAnswer):
                operator.status(tries=2)
            self.assertLess(time.monotonic() - begin, 10)

    def test_a_plan_is_cut_and_sent_until_it_is_acknowledged(self):
        plan = bytes(random.Random(2).randrange(256) for _ in range(2500))
        parts = {}

        def answer(daemon, message, _):
            # The first part is lost the first time.
            if len(daemon.got) == 1:
                return None
            fields = message.fields
            parts[fields["part"]] = bytes.fromhex(fields["bytes"])
            whole = b"".join(parts[part] for part in sorted(parts))
            return [ack(message, plan=fields["digest"])] if len(whole) == fields["total_bytes"] else None

        with Daemon(answer) as daemon, client.Planner(daemon.address) as planner:
            self.assertEqual(planner.send_plan(plan), hashlib.sha256(plan).hexdigest())
            numbers = {(message.fields["part"], message.sequence) for message in daemon.got}
        self.assertEqual(b"".join(parts[part] for part in range(3)), plan)
        self.assertEqual(len(numbers), 3)
        with client.Planner(("127.0.0.1", 9)) as planner, self.assertRaises(client.ProtocolError):
            planner.send_plan(b"")

    def test_only_the_parts_that_are_missing_are_sent_again(self):
        plan, lost, parts = bytes(20 * 100), {3, 11}, []

        def answer(daemon, message, _):
            number = message.fields["part"]
            parts.append(number)
            if number != 19:
                return None
            missing = lost - set(parts[20:])
            if not missing:
                return [ack(message, plan=message.fields["digest"])]
            marks = bytes([1, 1])
            return [("plan-missing", {"digest": message.fields["digest"], "missing": 2, "first": 3, "marks": marks.hex()})]

        with Daemon(answer) as daemon, client.Planner(daemon.address) as planner:
            planner.send_plan(plan, part_bytes=100, wait_s=1.0)
        self.assertEqual(parts, list(range(20)) + [3, 11, 19])

    def test_a_pose_source_answers_time_requests_while_it_sends(self):
        replied = threading.Event()

        def answer(_, message, __):
            if message.kind == "time-reply":
                replied.set()
                return None
            return [("time-request", {"sent_ns": 2**64 - 1})]

        with Daemon(answer) as daemon, client.PoseSource(daemon.address) as source:
            source.send_pose(1.0, -2.0, 3.0)
            source.send_pose(1.0, -2.0, 3.0, measured_ns=7, position_sd_m=0.1)
            self.assertTrue(replied.wait(5))
            poses = [message for message in daemon.got if message.kind == "pose"]
            reply = next(message for message in daemon.got if message.kind == "time-reply")
        self.assertEqual((poses[-1].fields["measured_ns"], poses[-1].fields["position_sd_m"]), (7, 0.1))
        self.assertEqual(reply.session, poses[0].session)
        self.assertEqual(reply.fields["request_sent_ns"], 2**64 - 1)
        self.assertLessEqual(reply.fields["request_received_ns"], reply.fields["reply_sent_ns"])


class Page(unittest.TestCase):
    def test_the_example_of_the_specification_runs(self):
        page = (VECTORS.parent / "PROTOCOL.md").read_text("utf-8")
        example = page.split("```python\n")[1].split("```")[0]
        with socket.socket(socket.AF_INET, socket.SOCK_DGRAM) as daemon:
            daemon.bind(("127.0.0.1", 0))
            daemon.settimeout(5)
            said = []
            names = {"ROBOT": "127.0.0.1", "PORT": daemon.getsockname()[1], "print": said.append}
            example = threading.Thread(target=exec, args=(example, names))
            example.start()
            # The first one is lost.
            lost, (stop, address) = daemon.recv(2000), daemon.recvfrom(2000)
            daemon.sendto(json.dumps({"kind": "ack", "text": ""}).encode(), address)
            example.join()
            names["link"].close()
        lost, stop = json.loads(lost), json.loads(stop)
        self.assertEqual((stop["kind"], stop["stop"], said), ("stop", "emergency", ["accepted"]))
        self.assertEqual([lost["session"], lost["sequence"]], [stop["session"], stop["sequence"]])


if __name__ == "__main__":
    unittest.main()
