"""The RP2040 as a whole: the peripherals at their addresses, and what each kind of reset leaves.

Sources: RP2040 datasheet 2.2 (addresses), 2.5.3.1 (request numbers); MicroPython
ports/rp2/main.c and rp2_pio.c for the order of a soft reset.
"""

from adc_model import Adc
from bus import Bus, Clock
from dma_model import Dma
from memory_model import Memory
from pins_model import Pins
from pio_model import Pio
from timer_model import Timer
from watchdog_model import HAD_POR, HAD_RUN, BoardReset, ChipReset, Watchdog

ADC, TIMER, WATCHDOG, CHIP_RESET = 0x4004C000, 0x40054000, 0x40058000, 0x40064000
IO_BANK0, PADS_BANK0 = 0x40014000, 0x4001C000
DMA, PIO0, PIO1, SIO = 0x50000000, 0x50200000, 0x50300000, 0xD0000000
DREQ_ADC = 36
PULSE, RELAY, RELEASE, STOP_LOOP, REVERSED, ZERO_INPUT = range(2, 8)


class Rp2040:
    def __init__(self, freq_hz=125_000_000):
        self.freq_hz = freq_hz
        self.clock = Clock(1_000_000_000 // freq_hz)
        self.memory = Memory()
        self.bus = Bus(self.clock, self.memory)
        self.adc = Adc(self.clock)
        self.dma = Dma(self.clock, self.bus)
        self.pins = Pins(self.clock)
        self.pios = [Pio(self.clock, self.pins, number) for number in range(2)]
        self.timer = Timer(self.clock)
        self.watchdog = Watchdog(self.clock, self._bitten)
        self.chip_reset = ChipReset()
        self.adc.request = lambda level: self.dma.request(DREQ_ADC, level)
        for pio in self.pios:
            pio.request = self._request_of(pio)
        self.dma.renew = self._renew
        self.clock.sources = [self.adc, self.dma, self.pios[0], self.pios[1], self.watchdog]
        for base, block in (
            (ADC, self.adc),
            (TIMER, self.timer),
            (WATCHDOG, self.watchdog),
            (CHIP_RESET, self.chip_reset),
            (IO_BANK0, self.pins.functions),
            (PADS_BANK0, self.pins.pads),
            (DMA, self.dma),
            (PIO0, self.pios[0]),
            (PIO1, self.pios[1]),
            (SIO, self.pins.sio),
        ):
            self.bus.attach(base, block)
        self.finalisers = []  # what a soft reset calls: objects of the heap that is swept
        self.claimed_machines = set()
        self.program_space = [0, 0]  # words of each PIO that hold a program
        self.flash_id = bytes(range(1, 9))

    def _request_of(self, pio):
        return lambda machine, level: self.dma.request(8 * pio.number + 4 + machine, level)

    def _renew(self, number):
        if number == DREQ_ADC:
            self.adc.ask()
        elif number < 16 and number & 4:
            pio = self.pios[number // 8]
            pio.ask(pio.machines[number & 3])

    # -- resets ----------------------------------------------------------------------------

    def _reset_all(self):
        """What each reset of the chip resets; the watchdog's reason and scratch stay."""
        self.adc.reset()
        self.pins.reset()
        for pio in self.pios:
            pio.reset()
        self.dma.reset()
        self.watchdog.reset()
        self.timer.set_us(0)
        self.clock.alarms = []
        self.clock.interrupts_on = True
        self.finalisers = []
        self.claimed_machines = set()
        self.program_space = [0, 0]

    def _bitten(self, reason):
        self._reset_all()
        self.watchdog.reason = reason
        raise BoardReset(f"watchdog, reason {reason}")

    def power_on(self, flags=HAD_POR):
        """From power-on, or `HAD_RUN`: from the RUN pin. Both clear the watchdog's reason."""
        self._reset_all()
        self.watchdog.reason = 0
        self.watchdog.scratch = [0] * 8
        self.chip_reset.held["CHIP_RESET"] = flags

    def run_pin(self):
        self.power_on(HAD_RUN)

    def soft_reset(self):
        """As ports/rp2/main.c: PIO machines of this run stop, the heap's finalisers close DMA and
        timers. Pins, converter, watchdog and all other registers stay as they are.
        """
        for number in self.claimed_machines:
            pio = self.pios[number // 4]
            pio.put("CTRL", pio.get("CTRL") & ~(1 << number % 4), 0)
        self.claimed_machines = set()
        self.program_space = [0, 0]
        finalisers, self.finalisers = self.finalisers, []
        for finish in finalisers:
            finish()
        self.clock.interrupts_on = True
