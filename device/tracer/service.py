"""Requests in, replies out: what each message does.

Comes in: bytes from the link. Goes out: frames to it, and calls of the sequencer. Replies to
the last few state-changing requests are kept, so that a request sent twice acts once.
"""

from kneewire import PROTOCOL, catalogue, framing
from kneewire.messages import (
    KNOTS_A_BLOCK,
    NO_SESSION,
    RAW_A_BLOCK,
    RAW_BYTES,
    Refused,
    fingerprint,
    pack,
    unpack,
)
from tracer import sequencer as states
from tracer.charge import Settings
from tracer.held import NO_ID
from tracer.interlocks import BEFORE_CLOSING, HANG, RELAY_OPEN, first_finding
from tracer.memory import MAX_KNOTS

FIRMWARE = (0, 1, 0)
STORED_REPLIES = 8
WINDOW = 16  # blocks in a burst
MIN_KNOTS = 16
RESERVE_BYTES = 3072

R_UNKNOWN_KIND = 1
R_UNKNOWN_SESSION = 3
R_STALE = 4
R_WRONG_STATE = 5
R_BAD_TOKEN = 7
R_INTERLOCK = 8
R_NO_SWEEP = 9
R_SWEEP_HELD = 10
R_OUT_OF_RANGE = 11


class Refusal(Exception):
    """Raised by a handler; becomes a refusal on the wire."""

    def __init__(self, code, finding=states.NO_FINDING):
        super().__init__(code)
        self.code = code
        self.finding = finding


class Leave(Exception):
    """The host asked for the prompt."""


class Service:
    def __init__(self, hal, profile, sequencer, held):
        self.hal = hal
        self.profile = profile
        self.sequencer = sequencer
        self.held = held
        self.boot_nonce = hal.random32()
        self.session = NO_SESSION
        self.host_nonce = None
        self.last_sequence = 0
        self.stored = []  # (sequence, frame), oldest first
        self.decoder = framing.Decoder(framing.coded_limit(catalogue.MAX_FRAME, True), True)
        self.fingerprint = fingerprint()
        self.armed_knots = 0
        self.armed = Settings(0)
        self.confirmed = False
        self.fired = None  # sweep id of an accepted fire, until `loop.py` has run the charge
        self.unheard = b""  # bytes behind an accepted fire, for the ear
        self._cut = False
        self._received_us = 0
        self._piece = bytearray(128)

    # -- bytes -----------------------------------------------------------------------

    def poll(self):
        """Read what has arrived and answer it; stops after an accepted fire."""
        while self.fired is None:
            count = self.hal.link_read(self._piece)
            if count == 0:
                return
            self.feed(bytes(self._piece[:count]))

    def feed(self, data):
        """Handle what `data` completes, up to an accepted fire; the rest waits in `unheard`."""
        while data and self.fired is None:
            end = data.find(framing.DELIMITER) + 1 or len(data)
            for item in self.decoder.feed(data[:end]):
                if not isinstance(item, framing.Bad):
                    self._received_us = self.hal.now_us()
                    self.handle(item)
            data = data[end:]
        self.unheard = data

    def send(self, frame):
        """Write one frame; False where the host has stopped reading and it was cut short."""
        # End the frame that was cut, so that only that one is lost; where not even that goes out,
        # nothing else may.
        if self._cut and not self.hal.link_write(framing.DELIMITER):
            return False
        self._cut = True  # also where Ctrl-C ends the write
        self._cut = self.hal.link_write(frame) < len(frame)
        return not self._cut

    def send_message(self, name, sequence, values):
        return self.send(framing.encode(pack(name, self.session, sequence, values), False))

    def charge_ended(self, sweep_id, end_reason):
        """The one notice that is sent unasked."""
        self.send_message("charge_ended", 0, {"sweep_id": sweep_id, "end_reason": end_reason})

    def abort_frame(self):
        """What the host of this session sends to abort, byte for byte."""
        return framing.encode(pack("abort", self.session, 0), True)

    # -- requests --------------------------------------------------------------------

    def handle(self, body):
        """Answer one body. Every request is answered."""
        # A host that does not read makes each answer take a second.
        self.sequencer.feed()
        try:
            request = unpack(body)
        except Refused as refused:
            known = catalogue.MESSAGES.get(refused.kind)
            # What does not travel this way is unknown here, however much of it came.
            strange = known is not None and known[1] != catalogue.TO_DEVICE
            code = R_UNKNOWN_KIND if strange else refused.code
            self._refuse(refused.kind, refused.session, refused.sequence, code)
            return
        kind = catalogue.KINDS[request.name]
        _, direction, frozen, changes, _ = catalogue.MESSAGES[kind]
        if direction != catalogue.TO_DEVICE:
            self._refuse(kind, request.session, request.sequence, R_UNKNOWN_KIND)
            return
        if request.name == "abort":
            self._reply(request, self._abort(request))
            return
        if not frozen and (request.session != self.session or self.session == NO_SESSION):
            self._refuse(kind, request.session, request.sequence, R_UNKNOWN_SESSION)
            return
        if changes:
            for sequence, frame in self.stored:
                if sequence == request.sequence:
                    self.send(frame)
                    return
            if request.sequence <= self.last_sequence:
                self._refuse(kind, request.session, request.sequence, R_STALE)
                return
        try:
            values = HANDLERS[request.name](self, request)
        except Refusal as refusal:
            frame = self._refusal_frame(
                kind, request.session, request.sequence, refusal.code, refusal.finding
            )
        else:
            frame = self._reply_frame(request, values)
        if changes:
            # Together: a request that Ctrl-C cut short may be sent again.
            self.last_sequence = request.sequence
            self.stored.append((request.sequence, frame))
            if len(self.stored) > STORED_REPLIES:
                self.stored.pop(0)
        self.send(frame)
        if request.name == "prompt" and values["leaving"]:
            raise Leave

    def _reply_frame(self, request, values):
        kind = catalogue.KINDS[request.name] | catalogue.REPLY
        name = catalogue.MESSAGES[kind][0]
        session = self.session if request.name == "hello" else request.session
        return framing.encode(pack(name, session, request.sequence, values), False)

    def _reply(self, request, values):
        self.send(self._reply_frame(request, values))

    def _refusal_frame(self, kind, session, sequence, code, finding=states.NO_FINDING):
        guard, measured, limit, unit = finding
        values = {
            "of_kind": kind,
            "code": code,
            "guard": guard,
            "measured": measured,
            "limit": limit,
            "unit": unit,
        }
        return framing.encode(pack("refusal", session, sequence, values), False)

    def _refuse(self, kind, session, sequence, code):
        self.send(self._refusal_frame(kind, session, sequence, code))

    # -- handlers: each returns the values of the reply, or raises Refusal -------------

    def _hello(self, request):
        if request["host_nonce"] != self.host_nonce:
            self.host_nonce = request["host_nonce"]
            self.session = self.hal.random32() & 0x7FFFFFFF
            self.last_sequence = 0
            self.stored = []
            self.confirmed = False
            self.sequencer.disarm()
        return {
            "major": PROTOCOL[0],
            "minor": PROTOCOL[1],
            "fingerprint": self.fingerprint,
            "firmware_major": FIRMWARE[0],
            "firmware_minor": FIRMWARE[1],
            "firmware_patch": FIRMWARE[2],
            "flags": catalogue.FLAG_EMULATED if self.hal.EMULATED else 0,
            "device_id": self.hal.device_id(),
            "boot_nonce": self.boot_nonce,
            "session": self.session,
            "reset_cause": self.hal.reset_cause(),
            "profile_crc": self.profile.crc if self.profile is not None else 0,
            "max_frame": catalogue.MAX_FRAME,
            "window": WINDOW,
            "max_knots": MAX_KNOTS,
            "ticks_per_s": 1000000,
        }

    def _prompt(self, request):
        # At the prompt the bleed is engaged; across a live source it would burn.
        welded = self.sequencer.state == states.FAULT and self.sequencer.finding[0] == 2
        return {"leaving": 0 if welded else 1}

    def _abort(self, request):
        self.sequencer.disarm()
        self.armed.raw = None
        return {"state": self.sequencer.state}

    def _status(self, request):
        sequencer = self.sequencer
        readings = sequencer.readings()
        guard, measured, limit, unit = sequencer.finding
        return {
            "state": sequencer.state,
            "contact_closed": 1 if sequencer.contact_closed else 0,
            "bleed_engaged": 1 if sequencer.bleed_engaged else 0,
            "stop_loop_closed": 1 if readings.stop_loop_closed else 0,
            "leads_reversed": 1 if readings.leads_reversed else 0,
            "time_us": self.hal.now_us(),
            "voltage_sum": readings.voltage_sum,
            "current_sum": readings.current_sum,
            "capacitor_sum": readings.capacitor_sum,
            "conversions": readings.conversions,
            "held": 1 if self.held.present() else 0,
            "sweep_id": self.held.sweep_id,
            "frames_good": self.decoder.good,
            "frames_bad": self.decoder.bad,
            "bleed_mj": readings.heat_mj,
            "rest_ms": sequencer.rest_ms(readings.source_mv) if self.profile is not None else 0,
            "guard": guard,
            "measured": measured,
            "limit": limit,
            "unit": unit,
        }

    def _read_profile(self, request):
        return {"record": self.profile.record if self.profile is not None else b""}

    def _heartbeat(self, request):
        return {"received_us": self._received_us, "replied_us": self.hal.now_us()}

    def _arm(self, request):
        self._demand(states.SAFE, states.ARMED)
        if self.held.present():
            raise Refusal(R_SWEEP_HELD)
        self._in_range(request["knots"], MIN_KNOTS, MAX_KNOTS)
        self._in_range(request["closed_limit_ms"], 1, 120000)
        self._in_range(request["raw_pairs"], 0, catalogue.MAX_RAW_PAIRS)
        self._in_range(request["raw_from_us"], 0, 120000000)
        # A bare relay is held by the pulse itself: there is no other to be left open.
        bare = self.profile is not None and self.profile.bare()
        self._in_range(request["exercise"], 0, HANG if bare else RELAY_OPEN)
        self.sequencer.disarm()
        self.armed.raw = None  # what an earlier arming took is free again
        armed = Settings(
            request["closed_limit_ms"],
            self._raw_buffer(request["raw_pairs"]),
            request["raw_from_us"],
        )
        armed.limit_mv = request["limit_mv"]
        armed.limit_ma = request["limit_ma"]
        armed.exercise = request["exercise"]
        if request["confirmed"]:
            self.confirmed = True
        readings = self._readings(armed)
        self.sequencer.read_zero(readings)
        token = self.hal.random32() or 1
        finding = self.sequencer.arm(token, readings)
        if finding is not None:
            raise Refusal(R_INTERLOCK, finding)
        self.armed_knots = request["knots"]
        self.armed = armed
        return {
            "token": token,
            "life_ms": self.profile["token_life_ms"],
            "voltage_sum": readings.voltage_sum,
            "capacitor_sum": readings.capacitor_sum,
            "conversions": readings.conversions,
        }

    def _readings(self, armed):
        return self.sequencer.readings(self.confirmed, armed.limit_mv, armed.exercise)

    def _raw_buffer(self, pairs):
        if not pairs:
            return None
        try:
            buffer = bytearray(RAW_BYTES * pairs)
            # Answers and what else must be possible while it is held.
            bytearray(RESERVE_BYTES)
            return buffer
        except MemoryError:
            raise Refusal(R_OUT_OF_RANGE) from None

    def _fire(self, request):
        sequencer = self.sequencer
        token = sequencer.token
        sequencer.token = 0  # the first well-formed fire spends it, accepted or refused
        self.sequencer.tick()
        self._demand(states.ARMED)
        if not token or request["token"] != token or request["sweep_id"] == NO_ID:
            sequencer.disarm()
            raise Refusal(R_BAD_TOKEN)
        finding = first_finding(BEFORE_CLOSING, self.profile, self._readings(self.armed))
        if finding is not None:
            sequencer.disarm()
            raise Refusal(R_INTERLOCK, finding)
        self.fired = request["sweep_id"]
        limit_ms = min(self.armed.closed_limit_ms, self.profile.closed_limit_ms())
        return {"quiet_ms": limit_ms + 500}

    def _clear_fault(self, request):
        self._demand(states.FAULT)
        finding = self.sequencer.clear()
        if finding is not None:
            raise Refusal(R_INTERLOCK, finding)
        return {"state": self.sequencer.state}

    def _read_logbook(self, request):
        book = self.sequencer.logbook
        return {
            "operations": book.operations,
            "hot_openings": book.hot_openings,
            "proof_day": book.proof_day,
            "proof_digest": book.proof_digest,
            "begun_anew": 1 if book.begun_anew else 0,
        }

    def _note_proof(self, request):
        self._demand(states.SAFE)
        self.sequencer.logbook.proven(request["day"], request["digest"])
        return {"kept": 1 if self.sequencer.logbook.keep() else 0}

    def _read_manifest(self, request):
        self._demand_held()
        return self.held.whole_manifest()

    def _fetch(self, request):
        self._demand_held()
        if request["sweep_id"] != self.held.sweep_id:
            raise Refusal(R_NO_SWEEP)
        return self._burst(request, self.held.count, KNOTS_A_BLOCK, self.held.block)

    def _fetch_raw(self, request):
        self._demand_held()
        if request["sweep_id"] != self.held.sweep_id:
            raise Refusal(R_NO_SWEEP)
        return self._burst(request, self.held.raw_count, RAW_A_BLOCK, self.held.raw_block)

    def _burst(self, request, there, most_a_block, block):
        """Send the blocks asked for, as many as the window allows."""
        first = request["first"]
        self._in_range(first, 0, there - 1)
        self._in_range(request["count"], 1, there - first)
        self._in_range(request["a_block"], 0, most_a_block)
        a_block = request["a_block"] or most_a_block
        count = min(request["count"], WINDOW * a_block)
        place = first
        while place < first + count:
            many = min(a_block, first + count - place)
            if not self.send(block(self.session, request.sequence, place, many)):
                break
            place += many
        return {"first": first, "count": count}

    def _acknowledge(self, request):
        held = self.held.present() and request["sweep_id"] == self.held.sweep_id
        if held:
            self.held.drop()
        return {"freed": 1 if held else 0}

    def _demand(self, *allowed):
        if self.sequencer.state not in allowed:
            finding = states.NO_FINDING
            if self.sequencer.state == states.FAULT:
                finding = self.sequencer.finding
            raise Refusal(R_WRONG_STATE, finding)

    def _demand_held(self):
        if not self.held.present():
            raise Refusal(R_NO_SWEEP)

    def _in_range(self, value, low, high):
        if not low <= value <= high:
            raise Refusal(R_OUT_OF_RANGE)


HANDLERS = {
    "hello": Service._hello,
    "prompt": Service._prompt,
    "status": Service._status,
    "read_profile": Service._read_profile,
    "heartbeat": Service._heartbeat,
    "arm": Service._arm,
    "fire": Service._fire,
    "clear_fault": Service._clear_fault,
    "read_logbook": Service._read_logbook,
    "note_proof": Service._note_proof,
    "read_manifest": Service._read_manifest,
    "fetch": Service._fetch,
    "fetch_raw": Service._fetch_raw,
    "acknowledge": Service._acknowledge,
}
