"""A client for Trackhold in plain Python (3.9 or newer, standard library only).

For estimators, planners and operators' scripts:

    source = PoseSource(("192.0.2.7", port))
    source.send_pose(x_m=1.0, y_m=2.0, heading_rad=0.1)

    digest = Planner(("192.0.2.7", port)).send_plan(open("plan.json", "rb").read())

    operator = Operator(("192.0.2.7", port))
    plan = compact_plan("bay-7", 1, [(0.0, 0.0, 0.0, 0.0), (1.0, 0.5, 0.0, 0.0), (2.0, 1.5, 0.0, 0.0)])

    operator.start(digest)
    operator.stop()                    # emergency, unless told otherwise

Below these lie `encode` and `decode`, which know every kind of message as a plain dict of its fields. Bytes, units and
duties are specified in PROTOCOL.md. A stop sent from here is a request, not a safety function.

SPDX-License-Identifier: MIT
"""

import hashlib
import json
import math
import secrets
import socket
import struct
import threading
import time
from typing import Any, Dict, List, NamedTuple, Optional, Sequence, Tuple

MAGIC = b"\xa7TKH"
HEADER = struct.Struct("<4sBBHQQQII")
TAG_BYTES = 16
MAX_DATAGRAM_BYTES = 1200
PART_BYTES = 1024
LEAST_SHARE = 0.05

WORDS = {
    "mode": ("standby", "tracking", "controlled-stop", "protective-stop", "emergency-stop"),
    "cause": (
        "boot", "operator", "plan-ended", "not-settled", "plan-ran-dry", "ramp-ended", "stale-pose",
        "outside-law-domain", "law-not-finite", "stalled-loop", "lost-trip", "shutdown", "pose-jump",
    ),
    "regime": ("none", "moving", "pivoting", "settling", "realigning"),
    "stop-kind": ("emergency", "controlled"),
    "start-at": ("beginning", "plan-time", "nearest"),
    "wheel-layout": ("body", "left-right", "speed-steer", "ackermann", "steered-wheel"),
}

# Kind number and fields in wire order. A type is a struct code, one of WORDS, "hex N", "blob N" or "text N".
KINDS: Dict[str, Tuple[int, Tuple[Tuple[str, str], ...]]] = {
    "pose": (1, (
        ("measured_ns", "Q"), ("x_m", "d"), ("y_m", "d"), ("heading_rad", "d"),
        ("position_sd_m", "d"), ("heading_sd_rad", "d"),
    )),
    "plan-part": (2, (
        ("digest", "hex 32"), ("total_bytes", "I"), ("part_bytes", "I"), ("part", "I"), ("bytes", "blob 1024"),
    )),
    "start": (3, (
        ("boot", "hex 16"), ("plan", "hex 32"), ("start_number", "Q"), ("at", "start-at"), ("plan_time_ns", "Q"),
    )),
    "stop": (4, (("stop", "stop-kind"),)),
    "reset": (5, ()),
    "subscribe": (6, (("want", "I"), ("lease_ms", "I"))),
    "journal-request": (7, (("first", "Q"), ("last", "Q"))),
    "status-request": (8, ()),
    "time-reply": (9, (("request_sent_ns", "Q"), ("request_received_ns", "Q"), ("reply_sent_ns", "Q"))),
    "cap": (10, (("share", "d"),)),
    "tune": (11, (("law", "text 900"),)),
    "ack": (64, (
        ("order_session", "Q"), ("order_sequence", "Q"), ("order_kind", "I"), ("accepted", "I"),
        ("plan", "hex 32"), ("text", "text 900"),
    )),
    "command": (65, (
        ("mode", "mode"), ("layout", "wheel-layout"), ("valid_ns", "Q"), ("speed_m_s", "d"),
        ("turn_rate_rad_s", "d"), ("wheels", "4d"),
    )),
    "journal-part": (66, (
        ("first", "Q"), ("entries", "I"), ("part", "I"), ("parts", "I"), ("bytes", "blob 1100"),
    )),
    "journal-gone": (67, (("first", "Q"), ("last", "Q"))),
    "subscribed": (68, (
        ("boot", "hex 16"), ("want", "I"), ("lease_ms", "I"), ("oldest_entry", "Q"), ("next_entry", "Q"),
    )),
    "status": (69, (
        ("boot", "hex 16"), ("start_number", "Q"), ("mode", "mode"), ("cause", "cause"), ("plan", "hex 32"),
        ("plan_id", "text 64"), ("plan_revision", "I"), ("plan_duration_ns", "Q"), ("plan_time_ns", "Q"),
        ("tick", "Q"), ("has_pose", "I"), ("x_m", "d"), ("y_m", "d"), ("heading_rad", "d"), ("pose_age_ns", "Q"),
        ("clock_offset_ns", "q"), ("along_error_m", "d"), ("cross_error_m", "d"), ("heading_error_rad", "d"),
        ("command_subscribers", "I"), ("journal_subscribers", "I"), ("oldest_entry", "Q"), ("next_entry", "Q"),
        ("counters", "counters"), ("regime", "regime"), ("plan_rate", "d"), ("speed_cap", "d"),
        ("bandwidth_rad_s", "d"), ("law", "text 32"), ("gains", "text 600"),
    )),
    "time-request": (70, (("sent_ns", "Q"),)),
    "plan-missing": (71, (("digest", "hex 32"), ("missing", "I"), ("first", "I"), ("marks", "blob 1024"))),
}

COUNTERS = (
    "datagrams", "malformed", "misdirected", "poses", "poses_refused", "orders_refused", "plans_refused",
    "events_dropped", "entries_lost", "ticks_late", "ticks_thin",
)

NAMES = {number: name for name, (number, _) in KINDS.items()}


class ProtocolError(ValueError):
    """Bytes or fields that are not a message; says what was wrong where."""


class NoAnswer(Exception):
    """The daemon did not answer an order in time. What became of the order is not known: ask for the status."""


class Refused(Exception):
    """The daemon refused an order; the text says why and what would mend it."""


class Message(NamedTuple):
    """A decoded datagram."""

    kind: str
    session: int
    sequence: int
    stamp_ns: int
    fields: Dict[str, Any]


def encode(kind: str, fields: Dict[str, Any], session: int, sequence: int, stamp_ns: int) -> bytes:
    """The datagram for a message.

    Raises ProtocolError naming a field that is missing, unknown or out of range."""
    if kind not in KINDS:
        raise ProtocolError(f"there is no kind {kind!r}")
    number, layout = KINDS[kind]
    unknown = set(fields) - {name for name, _ in layout}
    if unknown:
        raise ProtocolError(f"{kind} has no field {sorted(unknown)[0]!r}")
    payload = b""
    for name, of in layout:
        if name not in fields:
            raise ProtocolError(f"{kind} needs a field {name!r}")
        try:
            payload += _pack(of, fields[name])
        except (struct.error, TypeError, ValueError, KeyError) as error:
            raise ProtocolError(f"{kind}, field {name}: {error}") from None
    try:
        return HEADER.pack(MAGIC, 1, number, len(payload), session, sequence, stamp_ns, 0, 0) + payload
    except struct.error as error:
        raise ProtocolError(f"session, sequence or stamp_ns: {error}") from None


def decode(datagram: bytes) -> Message:
    """Decodes a binary datagram. Raises ProtocolError, and nothing else, on any bytes that are not one."""
    if not HEADER.size <= len(datagram) <= MAX_DATAGRAM_BYTES:
        raise ProtocolError(f"{len(datagram)} bytes; a datagram has {HEADER.size} to {MAX_DATAGRAM_BYTES}")
    magic, version, number, length, session, sequence, stamp_ns, _, reserved = HEADER.unpack_from(datagram)
    if magic != MAGIC or version != 1 or reserved != 0:
        raise ProtocolError("header: another magic, version or reserved bytes that are not 0")
    if len(datagram) - HEADER.size - length not in (0, TAG_BYTES):
        raise ProtocolError(f"header: a payload of {length} bytes is stated in a datagram of {len(datagram)}")
    if number not in NAMES:
        raise ProtocolError(f"header: there is no kind {number}")
    kind, at, fields = NAMES[number], 0, {}
    payload = datagram[HEADER.size:HEADER.size + length]
    for name, of in KINDS[kind][1]:
        try:
            fields[name], at = _unpack(of, payload, at)
        except (struct.error, ValueError, IndexError) as error:
            raise ProtocolError(f"{kind}, field {name}: {error}") from None
    if at != length:
        raise ProtocolError(f"{kind}: {length - at} bytes too many")
    return Message(kind, session, sequence, stamp_ns, fields)


def _finite(*numbers: float) -> None:
    for number in numbers:
        if not math.isfinite(number):
            raise ValueError("not a finite number")


def _pack(of: str, value: Any) -> bytes:
    if of in WORDS:
        return struct.pack("<I", WORDS[of].index(value))
    if of == "counters":
        return struct.pack("<11Q", *(value[name] for name in COUNTERS))
    if " " not in of:
        values = value if of == "4d" else (value,)
        if of[-1] == "d":
            _finite(*values)
        return struct.pack("<" + of, *values)
    what, bound = of.split()
    data = value.encode() if what == "text" else bytes.fromhex(value)
    if what == "hex" and len(data) != int(bound) or len(data) > int(bound):
        raise ValueError(f"{len(data)} bytes, {bound} fit")
    return data if what == "hex" else struct.pack("<H", len(data)) + data


def _unpack(of: str, data: bytes, at: int) -> Tuple[Any, int]:
    if of in WORDS:
        (number,) = struct.unpack_from("<I", data, at)
        if number >= len(WORDS[of]):
            raise ValueError(f"there is no {of} {number}")
        return WORDS[of][number], at + 4
    if of == "counters":
        return dict(zip(COUNTERS, struct.unpack_from("<11Q", data, at))), at + 88
    if " " not in of:
        values = struct.unpack_from("<" + of, data, at)
        if of[-1] == "d":
            _finite(*values)
        return list(values) if of == "4d" else values[0], at + struct.calcsize("<" + of)
    what, bound = of.split()
    count = int(bound)
    if what != "hex":
        (count,) = struct.unpack_from("<H", data, at)
        at += 2
    if count > int(bound) or at + count > len(data):
        raise ValueError(f"states {count} bytes, {min(int(bound), len(data) - at)} can be there")
    piece = data[at:at + count]
    return piece.decode() if what == "text" else piece.hex(), at + count


class Link:
    """A socket towards one daemon, with this sender's session and sequence."""

    def __init__(self, daemon: Tuple[str, int]):
        self.session = secrets.randbits(64)
        family, kind, proto, _, address = socket.getaddrinfo(*daemon, type=socket.SOCK_DGRAM)[0]
        self._socket = socket.socket(family, kind, proto)
        # Connected: the system drops what comes from anywhere else.
        self._socket.connect(address)
        self._sequence = 0
        self._lock = threading.Lock()

    def __enter__(self):
        return self

    def __exit__(self, *_):
        self.close()

    def close(self) -> None:
        """Closes the socket."""
        self._socket.close()

    def next_sequence(self) -> int:
        """A sequence number not used before in this session."""
        with self._lock:
            self._sequence += 1
            return self._sequence

    def send(self, kind: str, fields: Dict[str, Any], sequence: Optional[int] = None) -> int:
        """Sends a message, under a new sequence number or, to repeat an order, under its first one."""
        sequence = self.next_sequence() if sequence is None else sequence
        datagram = encode(kind, fields, self.session, sequence, time.monotonic_ns())
        try:
            self._socket.send(datagram)
        except ConnectionError:
            # An earlier datagram found nobody there (yet): for the sender the same as a lost one.
            pass
        return sequence

    def receive(self, timeout_s: float) -> Optional[Message]:
        """The next sound message, or None if none comes in time. What does not decode is passed over."""
        end = time.monotonic() + timeout_s
        while True:
            left = end - time.monotonic()
            if left <= 0:
                return None
            self._socket.settimeout(left)
            try:
                return decode(self._socket.recv(MAX_DATAGRAM_BYTES + 1))
            except (ProtocolError, ConnectionError):
                continue
            except socket.timeout:
                return None

    def wait_for(self, kind: str, timeout_s: float, **expected: Any) -> Optional[Message]:
        """The next message of a kind whose fields are as expected, or None; others are passed over."""
        end = time.monotonic() + timeout_s
        while True:
            message = self.receive(end - time.monotonic())
            if message is None:
                return None
            if message.kind == kind and all(message.fields[name] == value for name, value in expected.items()):
                return message


class PoseSource(Link):
    """Sends poses, and answers the daemon's time requests from a thread of its own.

    The thread matters: a time request that waits in the socket until somebody looks would make this clock seem to be
    ahead. Give answer_time=False where the interpreter is too busy to answer within a millisecond or so."""

    def __init__(self, daemon: Tuple[str, int], answer_time: bool = True):
        super().__init__(daemon)
        self._closing = threading.Event()
        self._answering = threading.Thread(target=self._answer, daemon=True) if answer_time else None
        if self._answering:
            self._answering.start()

    def send_pose(self, x_m: float, y_m: float, heading_rad: float, measured_ns: Optional[int] = None,
                  position_sd_m: float = 0.0, heading_sd_rad: float = 0.0) -> None:
        """Sends a pose. measured_ns is when it was true, by time.monotonic_ns(); now, if left out."""
        self.send("pose", {
            "measured_ns": time.monotonic_ns() if measured_ns is None else measured_ns,
            "x_m": x_m, "y_m": y_m, "heading_rad": heading_rad,
            "position_sd_m": position_sd_m, "heading_sd_rad": heading_sd_rad,
        })

    def close(self) -> None:
        """Ends the thread and closes the socket."""
        self._closing.set()
        if self._answering:
            self._answering.join()
        super().close()

    def _answer(self) -> None:
        while not self._closing.is_set():
            try:
                message = self.receive(0.2)
                received_ns = time.monotonic_ns()
                if message is not None and message.kind == "time-request":
                    self.send("time-reply", {
                        "request_sent_ns": message.fields["sent_ns"],
                        "request_received_ns": received_ns,
                        "reply_sent_ns": time.monotonic_ns(),
                    })
            except OSError:
                # The network is away; poses go on, and so does this once it is back.
                self._closing.wait(0.2)


def compact_plan(plan_id: str, revision: int, points: Sequence[Sequence[float]], open_end: bool = False,
                 continues_at_s: Optional[float] = None, speed: bool = False, turn_rate: bool = False) -> bytes:
    """A plan of samples in its compact form.

    A point is t_s, x_m, y_m, heading_rad, then speed_m_s if `speed` is set, then turn_rate_rad_s if `turn_rate` is. The
    plan starts at the first point. Raises ProtocolError naming what is out of range."""
    name, width = plan_id.encode(), 4 + speed + turn_rate
    if not 1 <= len(name) <= 64 or 0 in name:
        raise ProtocolError("plan_id: give 1 to 64 bytes, none of them 0")
    if len(points) < 2:
        raise ProtocolError(f"points: {len(points)} of them, give at least two")
    flags = open_end | speed << 1 | turn_rate << 2 | (continues_at_s is not None) << 3
    try:
        _finite(continues_at_s or 0.0)
        plan = bytearray(struct.pack(
            "<8sII4dII64s3d", b"TRKHPLN1", revision, flags, *points[0][1:4], continues_at_s or 0.0,
            len(points), 0, name, 0.0, 0.0, 0.0))
    except (struct.error, TypeError, ValueError) as error:
        raise ProtocolError(f"revision, continues_at_s or points[0]: {error}") from None
    pack = struct.Struct(f"<{width}d").pack
    for index, point in enumerate(points):
        try:
            _finite(*point)
            plan += pack(*point)
        except (struct.error, TypeError, ValueError) as error:
            raise ProtocolError(f"points[{index}], {width} numbers each: {error}") from None
    return bytes(plan)


class Planner(Link):
    """Sends plans."""

    def send_plan(self, plan: bytes, part_bytes: int = PART_BYTES, tries: int = 20, wait_s: float = 0.1) -> str:
        """Sends a plan until it is acknowledged and returns its digest, which a start has to quote.

        Raises Refused with the daemon's findings, or NoAnswer."""
        if not plan:
            raise ProtocolError("a plan has at least one byte")
        digest = hashlib.sha256(plan).hexdigest()
        pieces = [plan[at:at + part_bytes] for at in range(0, len(plan), part_bytes)]
        sequences = [self.next_sequence() for _ in pieces]
        silent, left, wanted = 0, len(pieces) + 1, range(len(pieces))
        while silent < tries:
            for count, part in enumerate(wanted):
                self.send("plan-part", {
                    "digest": digest, "total_bytes": len(plan), "part_bytes": part_bytes,
                    "part": part, "bytes": pieces[part].hex(),
                }, sequences[part])
                if count % 32 == 31:
                    # Receive buffers are small; a plan sent in one go would lose its end.
                    time.sleep(0.001)
            answer = self._plan_answer(digest, set(sequences), wait_s)
            if answer is None:
                silent, wanted = silent + 1, range(len(pieces))
            elif answer.kind == "ack":
                _outcome(answer)
                return digest
            else:
                # The last part asks what is missing still.
                silent = 0 if answer.fields["missing"] < left else silent + 1
                left, wanted = answer.fields["missing"], _missing(answer, len(pieces) - 1) + [len(pieces) - 1]
        raise NoAnswer(f"no answer to a plan of {len(pieces)} parts, sent {tries} times")

    def _plan_answer(self, digest: str, own: set, wait_s: float) -> Optional[Message]:
        """The outcome of a plan, or what is missing of it."""
        end = time.monotonic() + wait_s
        while True:
            message = self.receive(end - time.monotonic())
            if message is None:
                return None
            fields = message.fields
            if message.kind == "plan-missing" and fields["digest"] == digest:
                return message
            if message.kind == "ack" and fields["order_session"] == self.session and fields["plan"] == digest \
                    and fields["order_kind"] == 2 and fields["order_sequence"] in own:
                return message


class Operator(Link):
    """Gives orders and asks for the status."""

    def status(self, tries: int = 20, wait_s: float = 0.1) -> Dict[str, Any]:
        """A fresh status, as a dict of the fields in PROTOCOL.md. Raises NoAnswer."""
        for _ in range(tries):
            self.send("status-request", {})
            answer = self.wait_for("status", wait_s)
            if answer is not None:
                return answer.fields
        raise NoAnswer(f"no status in {tries} tries")

    def start(self, plan: str, at: str = "beginning", plan_time_ns: int = 0) -> None:
        """Sets the machine in motion on the plan with this digest, which has to be the one loaded.

        Raises Refused or NoAnswer."""
        status = self.status()
        self._order("start", {
            "boot": status["boot"], "plan": plan, "start_number": status["start_number"],
            "at": at, "plan_time_ns": plan_time_ns,
        })

    def stop(self, kind: str = "emergency") -> None:
        """Asks for a stop, every 20 ms until it is acknowledged. Raises Refused or NoAnswer."""
        self._order("stop", {"stop": kind}, tries=100, wait_s=0.02)

    def reset(self) -> None:
        """Leaves a latched stop for standby; moves nothing. Raises Refused or NoAnswer."""
        self._order("reset", {})

    def cap(self, share: float) -> None:
        """Lets the plan's time run no faster than this share of its pace, 0.05 to 1, until the next cap.

        Raises ProtocolError, Refused or NoAnswer."""
        if not LEAST_SHARE <= share <= 1:
            raise ProtocolError(f"cap, field share: {share} is not {LEAST_SHARE} to 1")
        self._order("cap", {"share": share})

    def tune(self, law: str, **gains: float) -> None:
        """Changes the law and its gains, also while a plan is followed; gains not named have their defaults.

        Raises Refused with the daemon's findings, or NoAnswer."""
        self._order("tune", {"law": json.dumps({"name": law, "gains": gains})})

    def _order(self, kind: str, fields: Dict[str, Any], tries: int = 20, wait_s: float = 0.1) -> None:
        sequence = self.next_sequence()
        for _ in range(tries):
            self.send(kind, fields, sequence)
            ack = self.wait_for("ack", wait_s, order_session=self.session, order_sequence=sequence)
            if ack is not None:
                _outcome(ack)
                return
        raise NoAnswer(f"no answer to a {kind}, sent {tries} times")


def _missing(answer: Message, below: int) -> List[int]:
    marks, first = bytes.fromhex(answer.fields["marks"]), answer.fields["first"]
    marked = (first + 8 * at + bit for at, byte in enumerate(marks) for bit in range(8) if byte >> bit & 1)
    return [part for part in marked if part < below]


def _outcome(ack: Message) -> None:
    if not ack.fields["accepted"]:
        raise Refused(ack.fields["text"])
