"""The loop of one tracer: wires the parts together and gives each its turn."""

from tracer import interlocks
from tracer import sequencer as states
from tracer.capture import Capture
from tracer.charge import INTERRUPTED, Charge, Result
from tracer.ear import Ear
from tracer.held import Held
from tracer.logbook import Logbook
from tracer.profile import load
from tracer.sequencer import Sequencer
from tracer.service import Leave, Service

PROFILE_FILE = "profile.bin"
LOGBOOK_FILE = "logbook.bin"


class Loop:
    """One tracer: `run` serves until the host asks for the prompt, and may be run again."""

    def __init__(self, hal, buffers, profile_file=PROFILE_FILE, logbook_file=LOGBOOK_FILE):
        self.hal = hal
        self.profile, _ = load(profile_file, hal.device_id())
        self._use_converters()
        self.sequencer = Sequencer(hal, self.profile, Logbook(logbook_file))
        self.held = Held(buffers, hal.ring, hal.cobs_into, hal.errors)
        self.capture = Capture(hal.ring, hal.RING_PAIRS, buffers, hal.CODE_BITS)
        self.ear = Ear(hal)
        self.left = False  # to the prompt, at least once
        self.bleeding_for = None  # the sweep whose bleed is under way
        self.service = Service(hal, self.profile, self.sequencer, self.held)

    def _use_converters(self):
        """As the profile says; a profile whose numbers no board can keep is as good as none."""
        profile = self.profile
        if profile is not None:
            self.hal.use_contact(profile.bare())
            try:
                self.hal.use_converters(
                    profile["converter"],
                    profile["pair_us"],
                    profile["spi_clock_khz"],
                    profile["spi_convert_ns"],
                )
            except ValueError:
                self.profile = None

    def run(self):
        try:
            if self.left:
                self.sequencer.resume()
                self.forget_fire()
            while True:
                self.step()
        except Leave:
            pass
        finally:
            self.left = True
            self.leave()
            self.hal.watchdog(0)

    def leave(self):
        self.sequencer.make_safe()
        self.hal.quiet_end()
        # A second Ctrl-C may have cut short the end of a charge.
        self.hal.capture_stop()
        self.hal.supervise_end()

    def forget_fire(self):
        """Ctrl-C between an accepted fire and its charge: nothing closed, and the sweep says so."""
        sweep_id, self.service.fired = self.service.fired, None
        if sweep_id is not None:
            result = Result()
            result.end_reason = INTERRUPTED
            self.capture.begin(0)
            self.held.prepare(self.service.armed_knots, self.capture, self.profile)
            self.held.begin(result)
            self.hold(sweep_id)

    def look_at_capacitor(self, result):
        """Its capacitance, from the charge that went in and the voltage that it brought (H15)."""
        nf = self.held.capacitance_nf(result)
        self.sequencer.watch.capacitance_nf = nf
        if nf:
            finding = interlocks.capacitance(self.profile, nf)
            if finding is not None and self.sequencer.state == states.BLEEDING:
                self.sequencer.fault(finding)

    def hold(self, sweep_id):
        self.held.keep(sweep_id, self.hal)
        self.service.armed.raw = None
        self.bleeding_for = sweep_id

    def step(self):
        """One turn of the loop."""
        self.service.poll()
        sweep_id = self.service.fired
        if sweep_id is not None:
            # Spent before it is carried out: no way out of the charge may lead to a second one.
            self.service.fired = None
            self.charge(sweep_id)
            self.service.feed(self.ear.kept())
        self.sequencer.tick()
        self.note_residual()
        self.tell_bleed_ended()
        self.sequencer.pause()

    def charge(self, sweep_id):
        """Run the accepted fire: charge, then hold what was measured."""
        service = self.service
        sequencer = self.sequencer
        self.ear.expect(service.abort_frame(), service.unheard)
        if service.armed.exercise != interlocks.RELAY_OPEN:
            # Kept before it closes: a reset in mid-charge must not lose it.
            sequencer.logbook.closed()
            sequencer.logbook.keep()
        sequencer.event(states.EV_FIRE)
        charge = Charge(self.hal, self.profile, self.capture, self.ear)
        self.held.prepare(service.armed_knots, self.capture, self.profile)
        try:
            result = charge.run(service.armed, sequencer, self.held)
        except BaseException:
            self.leave()
            raise
        if result.finding is None:
            sequencer.event(states.EV_OPENED)
        else:
            sequencer.fault(result.finding)
        sequencer.settle_bleed()
        service.charge_ended(sweep_id, result.end_reason)
        self.hold(sweep_id)
        self.look_at_capacitor(result)
        if result.end_reason == INTERRUPTED:
            raise KeyboardInterrupt

    def tell_bleed_ended(self):
        """Once for each sweep, so that a host need not ask again and again."""
        state = self.sequencer.state
        if self.bleeding_for is not None and state != states.BLEEDING:
            self.service.send_message(
                "bleed_ended", 0, {"sweep_id": self.bleeding_for, "state": state}
            )
            self.bleeding_for = None

    def note_residual(self):
        """Once the bleed has done its work, the manifest says what it left."""
        manifest = self.held.manifest
        state = self.sequencer.state
        if not manifest or not self.sequencer.residual[1]:
            return
        # In a fault the bleed goes on, and its latest reading is the one to tell.
        if state == states.FAULT or (state == states.SAFE and not manifest["residual_conversions"]):
            manifest["residual_sum"], manifest["residual_conversions"] = self.sequencer.residual
            manifest["bleed_tau_us"] = self.sequencer.watch.tau_us
