"""What the requests do on the scripted device: a tracer with a made-up curve.

It says that it is emulated, so that no host takes its curve for a measured one.
"""

from __future__ import annotations

from functools import partial
from typing import Any
from zlib import crc32

from conformance.bursts import BURSTS
from conformance.host_device import ARMED, BLEEDING, CHARGING, SAFE, Conversation, Twist
from conformance.host_model import CONVERSIONS, LIFE_MS, PAIR_US, PROFILE, Curve, code, raw_pairs
from kneewire import PROTOCOL, catalogue
from kneewire.messages import RAW_BYTES, Message, fingerprint
from kneewire.profile_record import pack_profile

COMPLETE, ABORTED = 1, 3
WINDOW = 16
MIN_KNOTS, MAX_KNOTS = 16, 512
MAX_LIMIT_MS = 120000
LATEST_US = 120000000
BLEED_S = 0.3
NO_ID = bytes(16)


class ScriptedDevice(Conversation):
    """One tracer, played by a script."""

    def __init__(self, twist: Twist) -> None:
        self.curve = Curve()
        self.profile = pack_profile(PROFILE)
        self.freed: list[bytes] = []
        """Ids of the sweeps that the host has acknowledged."""
        super().__init__(twist)

    def boot(self) -> None:
        super().boot()
        self.held_id = NO_ID
        self.records = b""
        self.raw = b""
        self.manifest: dict[str, Any] = {}
        self.knots = 0
        self.raw_from_us = self.raw_wanted = 0
        self.charging_id = NO_ID
        self.charge_us = 0

    def carry_out(self, message: Message) -> None:
        HANDLERS[message.name](self, message)

    # -- a sweep ---------------------------------------------------------------------------

    def charge(self, sweep_id: bytes) -> None:
        self.state = CHARGING
        self.charging_id = sweep_id
        self.charge_us = self.time_us()
        self.later(self.twist.charge_s, partial(self._ended, sweep_id, COMPLETE))

    def abort_charge(self) -> None:
        self._ended(self.charging_id, ABORTED)

    def _ended(self, sweep_id: bytes, reason: int) -> None:
        if self.state != CHARGING or self.charging_id != sweep_id:
            return
        self.state = BLEEDING
        self.notice("charge_ended", sweep_id=sweep_id, end_reason=reason)
        self._hold(sweep_id, reason)
        self.later(BLEED_S, partial(self._bled, sweep_id))
        late, self.late = self.late, []
        for heard in late:
            self.answer(heard)

    def _bled(self, sweep_id: bytes) -> None:
        if self.state == BLEEDING and self.charging_id == sweep_id:
            self.state = SAFE
            self.notice("bleed_ended", sweep_id=sweep_id, state=SAFE)

    def _hold(self, sweep_id: bytes, reason: int) -> None:
        many = self.knots if reason == COMPLETE else 0
        self.records, pairs, ended_us = self.curve.records(many, self.charge_us)
        raw_first = self.raw_from_us // PAIR_US
        self.raw = raw_pairs(self.records, raw_first, self.raw_wanted)
        self.held_id = sweep_id
        open_code = code(self.curve.voc_v, "voltage_nv_per_code", 24)
        self.manifest = {
            "sweep_id": sweep_id,
            "end_reason": reason,
            "knots": many,
            "pairs": pairs,
            "knots_crc": crc32(self.records),
            "ring_overruns": 0,
            "conversions_lost": 0,
            "conducting_us": self.charge_us,
            "opened_us": ended_us,
            "pair_ns": 1000 * PAIR_US,
            "skew_ns": 2000,
            "bin_pairs": 1,
            "voltage_sum": round(CONVERSIONS * open_code),
            "current_sum": CONVERSIONS * 40,
            "conversions": CONVERSIONS,
            "residual_sum": CONVERSIONS * 24,
            "residual_conversions": CONVERSIONS,
            "profile_crc": crc32(self.profile),
            "voltage_zero_sum": CONVERSIONS * 24,
            "zero_conversions": CONVERSIONS,
            "bounces": 0,
            "raw_first": raw_first if self.raw else 0,
            "raw_pairs": self.raw_count(),
            "raw_crc": crc32(self.raw),
            "capacitor_before_sum": 16 * 24,
            "capacitor_full_sum": round(16 * open_code),
            "capacitor_conversions": 16,
            "opening_code": 40,
            "hot_opening": 0,
            "bleed_tau_us": 219_000,
        }

    def raw_count(self) -> int:
        return len(self.raw) // RAW_BYTES

    def drop(self) -> None:
        self.freed.append(self.held_id)
        self.held_id = NO_ID
        self.records = b""
        self.raw = b""


def on_hello(device: ScriptedDevice, message: Message) -> None:
    if message["host_nonce"] != device.nonce:
        device.begin_session()
        device.nonce = message["host_nonce"]
        device.session = device.random.getrandbits(31)
        if device.state == ARMED:
            device.state = SAFE
    device.reply(
        message,
        major=PROTOCOL[0],
        minor=PROTOCOL[1],
        fingerprint=fingerprint(),
        firmware_major=0,
        firmware_minor=0,
        firmware_patch=0,
        flags=catalogue.FLAG_EMULATED,
        device_id=PROFILE["device_id"],
        boot_nonce=device.boot_nonce,
        session=device.session,
        reset_cause=device.reset_cause,
        profile_crc=crc32(device.profile),
        max_frame=catalogue.MAX_FRAME,
        window=WINDOW,
        max_knots=MAX_KNOTS,
        ticks_per_s=1000000,
    )


def on_prompt(device: ScriptedDevice, message: Message) -> None:
    device.reply(message, leaving=1)
    device.show_prompt()


def on_abort(device: ScriptedDevice, message: Message) -> None:
    if device.state == ARMED:
        device.state = SAFE
        device.token = 0
    device.reply(message, state=device.state)


def on_status(device: ScriptedDevice, message: Message) -> None:
    device.reply(
        message,
        state=device.state,
        contact_closed=0,
        bleed_engaged=1,
        stop_loop_closed=1,
        leads_reversed=0,
        time_us=device.time_us(),
        voltage_sum=round(CONVERSIONS * code(device.curve.voc_v, "voltage_nv_per_code", 24)),
        current_sum=CONVERSIONS * 40,
        capacitor_sum=CONVERSIONS * 24,
        conversions=CONVERSIONS,
        held=int(device.held_id != NO_ID),
        sweep_id=device.held_id,
        frames_good=device.good,
        frames_bad=device.bad,
        bleed_mj=0,
        rest_ms=0,
        guard=0,
        measured=0,
        limit=0,
        unit=0,
    )


def on_read_profile(device: ScriptedDevice, message: Message) -> None:
    device.reply(message, record=device.profile)


def on_heartbeat(device: ScriptedDevice, message: Message) -> None:
    device.reply(message, received_us=device.time_us(), replied_us=device.time_us())


def on_arm(device: ScriptedDevice, message: Message) -> None:
    if device.state not in (SAFE, ARMED):
        device.refuse(message, "wrong state")
    elif device.held_id != NO_ID:
        device.refuse(message, "another sweep is held")
    elif not (
        MIN_KNOTS <= message["knots"] <= MAX_KNOTS
        and 1 <= message["closed_limit_ms"] <= MAX_LIMIT_MS
        and message["raw_pairs"] <= catalogue.MAX_RAW_PAIRS
        and message["raw_from_us"] <= LATEST_US
    ):
        device.refuse(message, "out of range")
    else:
        token = device.random.getrandbits(32) or 1
        device.state = ARMED
        device.token = token
        device.knots = message["knots"]
        device.raw_from_us, device.raw_wanted = message["raw_from_us"], message["raw_pairs"]
        device.later(LIFE_MS / 1000, partial(_expire, device, token))
        device.reply(
            message,
            token=token,
            life_ms=LIFE_MS,
            voltage_sum=round(CONVERSIONS * code(device.curve.voc_v, "voltage_nv_per_code", 24)),
            capacitor_sum=CONVERSIONS * 24,
            conversions=CONVERSIONS,
        )


def _expire(device: ScriptedDevice, token: int) -> None:
    if device.state == ARMED and device.token == token:
        device.state = SAFE
        device.token = 0


def on_fire(device: ScriptedDevice, message: Message) -> None:
    token, device.token = device.token, 0
    if device.state != ARMED:
        device.refuse(message, "wrong state")
        return
    device.state = SAFE
    if message["token"] != token or message["sweep_id"] == NO_ID:
        device.refuse(message, "bad token")
        return
    quiet_s = max(2 * device.twist.charge_s, 0.5)
    device.reply(message, quiet_ms=round(1000 * quiet_s))
    device.charge(message["sweep_id"])


def on_clear_fault(device: ScriptedDevice, message: Message) -> None:
    device.refuse(message, "wrong state")


def on_read_logbook(device: ScriptedDevice, message: Message) -> None:
    device.reply(
        message, operations=7, hot_openings=0, proof_day=0, proof_digest=NO_ID, begun_anew=0
    )


def on_note_proof(device: ScriptedDevice, message: Message) -> None:
    device.reply(message, kept=1)


def on_read_manifest(device: ScriptedDevice, message: Message) -> None:
    if device.held_id == NO_ID:
        device.refuse(message, "no held sweep")
    else:
        device.reply(message, **device.manifest)


def on_fetch(device: ScriptedDevice, message: Message) -> None:
    _burst(device, message, device.records)


def on_fetch_raw(device: ScriptedDevice, message: Message) -> None:
    _burst(device, message, device.raw)


def _burst(device: ScriptedDevice, message: Message, records: bytes) -> None:
    """As many blocks of them as were asked for and the window allows."""
    burst = BURSTS[message.name]
    size, fit = burst.record_bytes, burst.most_a_block
    first, count, a_block = message["first"], message["count"], message["a_block"]
    total = len(records) // size
    if message["sweep_id"] != device.held_id or device.held_id == NO_ID:
        device.refuse(message, "no held sweep")
    elif not (first < total and 1 <= count <= total - first and a_block <= fit):
        device.refuse(message, "out of range")
    else:
        a_block = a_block or fit
        count = min(count, WINDOW * a_block)
        for place in range(first, first + count, a_block):
            after = min(place + a_block, first + count)
            data = records[place * size : after * size]
            device.notice(burst.block, message.sequence, first=place, data=data)
        device.reply(message, first=first, count=count)


def on_acknowledge(device: ScriptedDevice, message: Message) -> None:
    freed = device.held_id != NO_ID and message["sweep_id"] == device.held_id
    if freed:
        device.drop()
    device.reply(message, freed=int(freed))


HANDLERS = {
    "hello": on_hello,
    "prompt": on_prompt,
    "abort": on_abort,
    "status": on_status,
    "read_profile": on_read_profile,
    "heartbeat": on_heartbeat,
    "arm": on_arm,
    "fire": on_fire,
    "clear_fault": on_clear_fault,
    "read_logbook": on_read_logbook,
    "note_proof": on_note_proof,
    "read_manifest": on_read_manifest,
    "fetch": on_fetch,
    "fetch_raw": on_fetch_raw,
    "acknowledge": on_acknowledge,
}
