"""What the scripts change in the scripted device: twists, each wrong or unusual in one way."""

from __future__ import annotations

from conformance.host_device import SAFE, Conversation, Twist
from kneewire import catalogue, framing
from kneewire.messages import HEADER_BYTES, RAW_BYTES, Message, pack

OTHERS_SEQUENCE = 100000  # of a reply that belongs to no request
UNKNOWN_KIND = 0xEE
LONG_GARBAGE = 1500
STOP_LOOP = 12
TRACEBACK = (
    b"Traceback (most recent call last):\r\n"
    b'  File "tracer/loop.py", line 60, in step\r\n'
    b"ValueError: made up by a script\r\n"
)
TWICE = 2


def coded(body: bytes) -> bytes:
    return framing.encode(body, False)


class LongCharge(Twist):
    charge_s = 1.3


class LostOnce(Twist):
    """The first reply of each name is lost."""

    def __init__(self) -> None:
        self._seen = {"block", "raw_block", "charge_ended", "bleed_ended"}

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name in self._seen:
            return [coded(body)]
        self._seen.add(message.name)
        return []


class NoticesLost(Twist):
    charge_s = 0.9

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        return [] if message.name in ("charge_ended", "bleed_ended") else [coded(body)]


class Doubled(Twist):
    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        return [coded(body), coded(body)]


class OthersReplies(Twist):
    """Before each reply comes one to somebody else's request, and a refusal of one."""

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if not message.sequence:
            return [coded(body)]
        other = message.sequence + OTHERS_SEQUENCE
        head = body[:5] + other.to_bytes(4, "little")
        values = {"of_kind": body[0] & ~catalogue.REPLY, "code": 7, "guard": 0}
        values |= {"measured": 0, "limit": 0, "unit": 0}
        refusal = pack("refusal", message.session, other, values)
        return [coded(head + body[HEADER_BYTES:]), coded(refusal), coded(body)]


class UnknownKinds(Twist):
    """With the header of what they surround."""

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        unknown = coded(bytes([UNKNOWN_KIND]) + body[1:HEADER_BYTES] + b"of a later version")
        return [unknown, coded(body), unknown]


class LongerBodies(Twist):
    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        room = catalogue.MAX_FRAME - framing.CRC_BYTES - len(body)
        return [coded(body + bytes(range(250, 256))[:room])]


class BlocksMissing(Twist):
    """Every second block of the first two bursts, of knots or of raw pairs."""

    block, reply = "block", "fetch_reply"

    def __init__(self) -> None:
        self._blocks = self._bursts = 0

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == self.reply:
            self._bursts += 1
        elif message.name == self.block:
            self._blocks += 1
            if self._bursts < TWICE and self._blocks % 2:
                return []
        return [coded(body)]


class RawBlocksMissing(BlocksMissing):
    block, reply = "raw_block", "fetch_raw_reply"


class WrongOnce(Twist):
    """One byte in the first block is not what the manifest's CRC was made of."""

    done = False

    def __init__(self, block: str, place: int) -> None:
        self._block = block
        self._place = place

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == self._block and not self.done:
            self.done = True
            wrong = bytearray(body)
            wrong[HEADER_BYTES + self._place] ^= 0x40
            return [coded(bytes(wrong))]
        return [coded(body)]


class RawBeyondTheCount(Twist):
    """Behind each block of raw pairs comes one of pairs that there are not."""

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name != "raw_block":
            return [coded(body)]
        values = {"first": device.raw_count(), "data": bytes(range(2 * RAW_BYTES))}
        return [coded(body), coded(pack("raw_block", message.session, message.sequence, values))]


class RawOfAnotherFetch(Twist):
    """Behind each block of raw pairs comes the same with other pairs, for a fetch of long ago."""

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name != "raw_block":
            return [coded(body)]
        values = {"first": message["first"], "data": bytes(len(message["data"]))}
        late = pack("raw_block", message.session, message.sequence + OTHERS_SEQUENCE, values)
        return [coded(body), coded(late)]


class NoticeOfAnother(Twist):
    """A charge_ended of another sweep comes late, while this one charges."""

    charge_s = 1.3

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == "fire_reply":
            values = {"sweep_id": bytes(range(16)), "end_reason": 1}
            late = coded(pack("charge_ended", message.session, 0, values))
            device.later(0.1, lambda: device.say(late))
        return [coded(body)]


class FireRefused(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        if message.name != "fire" or message.sequence in device.stored:
            return False
        device.highest = message.sequence
        device.token = 0
        device.state = SAFE
        device.refuse(message, "interlock", STOP_LOOP)
        return True


class ResetBehindFire(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        if message.name == "fire" and message.session == device.session:
            device.reset()
            return True
        return False


class ForgottenBehindFire(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        if message.name == "fire" and message.session == device.session:
            device.forget_session()
        return False


class PromptInPlace(Twist):
    """In place of the answer to the first arm."""

    shown = False

    def request(self, device: Conversation, message: Message) -> bool:
        if message.name == "arm" and not self.shown:
            self.shown = True
            device.show_prompt(TRACEBACK)
            return True
        return False


class OtherVersion(Twist):
    """Fields of hello_reply that are not those of this version."""

    def __init__(self, **fields: int) -> None:
        self._fields = fields

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        if message.name == "hello_reply":
            values = {**message.values, **self._fields}
            body = pack("hello_reply", message.session, message.sequence, values)
        return [coded(body)]


class GarbageBetween(Twist):
    """Of all lengths; every sixth time without a delimiter, which costs the frame behind it."""

    def __init__(self) -> None:
        self._times = 0

    def outgoing(self, device: Conversation, message: Message, body: bytes) -> list[bytes]:
        self._times += 1
        size = LONG_GARBAGE if self._times == TWICE else device.random.randrange(1, 80)
        noise = bytes(device.random.randrange(256) for _ in range(size))
        empty = 3 * framing.DELIMITER
        spoils = self._times % 6 == 0 and message.name != "hello_reply"
        return [empty + noise + (b"" if spoils else framing.DELIMITER) + coded(body)]


class Silent(Twist):
    def request(self, device: Conversation, message: Message) -> bool:
        return True
