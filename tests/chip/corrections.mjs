// Corrections to the peripherals of rp2040js, applied to one chip at each boot.
//
// Comes in: a fresh RP2040 object. Goes out: the same object with an ADC, DMA, GPIO and PIO that
// keep to the datasheet where the firmware depends on it, and the small interface by which a
// plant watches pins and feeds the converter. Not corrected: what this firmware does not use
// (SPI, UART, PWM), waits of the flash, bus contention, the second core.

const ADC_CONVERSION_NS = 2000; // 96 cycles of 48 MHz
const DREQ_ADC = 36;
const PIO_AHEAD_NS = 500; // a state machine runs this far ahead of the processor
const SYNC_CYCLES = 2; // of the system clock: the PIO's input synchroniser

export function correct(mcu, world) {
  const api = {
    boot: world.boot,
    nanos: () => world.base + mcu.clock.nanosCounter, // runs on over resets
    alarm: (fn) => mcu.clock.createAlarm(fn), // with schedule(ns from now)
  };
  correctAdc(mcu, api);
  correctDma(mcu);
  correctGpio(mcu, api);
  for (const pio of mcu.pio) correctPio(mcu, pio, api);
  startTimerAt(mcu, world.uptimeUs);
  fillGaps(mcu, world);
  return api;
}

// The 64-bit timer as if the chip had been up for a while.
function startTimerAt(mcu, us) {
  const { clock } = mcu;
  const timer = mcu.peripherals[0x40054];
  timer.clock = { get nanos() { return clock.nanosCounter + us * 1000; } };
}

// CS.START_MANY acts on its rising edge; the round robin goes to the next set bit after AINSEL;
// a full FIFO drops the result and sets FCS.OVER, which a one written clears.
function correctAdc(mcu, api) {
  const { adc, clock, dma } = mcu;
  let sample = () => 0;
  let held = 0; // the code that the conversion under way will give
  let many = false;
  let startedAt = 0;
  api.onAdc = (fn) => { sample = fn; }; // fn(channel, ns) -> 0..4095, at the start of a conversion

  adc.sampleAlarm.callback = () => adc.completeADCRead(held, false);
  adc.multiShotAlarm.callback = () => { if (many && !adc.busy) adc.startADCRead(); };
  adc.onADCRead = (channel) => {
    adc.currentChannel = channel;
    held = Math.min(4095, Math.max(0, Math.round(sample(channel, api.nanos()))));
    adc.sampleAlarm.schedule(ADC_CONVERSION_NS);
  };
  adc.updateDMA = () => {
    const threshold = (adc.fcs >> 24) & 15;
    if (adc.fcs & 8 && adc.fifo.itemCount >= threshold) dma.setDREQ(DREQ_ADC);
    else dma.clearDREQ(DREQ_ADC);
    adc.checkInterrupts();
  };
  adc.startADCRead = () => {
    startedAt = clock.nanosCounter;
    adc.busy = true;
    adc.onADCRead((adc.cs >> 12) & 7);
  };
  adc.completeADCRead = (value) => {
    adc.busy = false;
    adc.result = value;
    if (adc.fcs & 1) {
      if (adc.fifo.full) adc.fcs |= 1 << 11;
      else {
        adc.fifo.push(adc.fcs & 2 ? value >> 4 : value);
        adc.updateDMA();
      }
    }
    const roundRobin = (adc.cs >> 16) & 0x1f;
    if (roundRobin) {
      let channel = (adc.cs >> 12) & 7;
      do channel = (channel + 1) % 5; while (!(roundRobin & (1 << channel)));
      adc.cs = (adc.cs & ~(7 << 12)) | (channel << 12);
    }
    if (many) {
      const period = Math.max(96, adc.divider) * 1e9 / 48e6;
      const wait = startedAt + period - clock.nanosCounter;
      if (wait > 0.01) adc.multiShotAlarm.schedule(wait);
      else adc.startADCRead();
    }
  };
  const plainWrite = adc.writeUint32.bind(adc);
  adc.writeUint32 = (offset, value) => {
    if (offset === 0) { // CS
      const writable = (0x1f << 16) | (7 << 12) | 0xb;
      adc.cs = (adc.cs & ~(writable | 4)) | (value & writable);
      const wanted = (value & 9) === 9; // EN and START_MANY
      const edge = wanted && !many;
      many = wanted;
      if (edge) adc.multiShotAlarm.cancel();
      if (value & 1 && !adc.busy && (value & 4 || edge)) adc.startADCRead();
    } else if (offset === 8) { // FCS
      adc.fcs &= ~(adc.rawWriteValue & 0xc00);
      const writable = (15 << 24) | 0xf;
      adc.fcs = (adc.fcs & ~writable) | (value & writable);
      adc.updateDMA();
    } else plainWrite(offset, value);
  };
}

// One transfer a cycle at best; CHAN_ABORT reads back as done.
function correctDma(mcu) {
  const { dma } = mcu;
  const cycle = () => 1e9 / mcu.clkSys;
  const plainRead = dma.readUint32.bind(dma);
  dma.readUint32 = (offset) => (offset === 0x444 ? 0 : plainRead(offset));
  for (const channel of dma.channels) {
    channel.scheduleTransfer = () => {
      const treq = channel.treqValue;
      if (treq === 63 || dma.dreq[treq]) channel.transferAlarm.schedule(cycle());
    };
  }
}

// Edges only on a change; an output can be read back; an undriven input follows its pull.
function correctGpio(mcu, api) {
  const outside = new Array(30).fill(null);
  const watchers = [];
  const settle = [];
  api.lines = [];
  for (const gpio of mcu.gpio) {
    gpio.level = false;
    gpio.padValue = 0x56; // the chip's reset value: input on, pulled down
    gpio.setInputValue = function (value) {
      const before = this.irqValue;
      const level = value && this.inputEnable;
      this.rawInputValue = value;
      this.irqStatus = level ? (this.irqStatus | 2) & ~1 : (this.irqStatus | 1) & ~2;
      if (level && !this.level) this.irqStatus |= 8;
      if (!level && this.level) this.irqStatus |= 4;
      this.level = level;
      if (this.irqValue !== before) mcu.updateIOInterrupt();
    };
    settle[gpio.index] = (state) => {
      let level = gpio.rawInputValue;
      if (state <= 1) level = state === 1;
      else if (outside[gpio.index] !== null) level = outside[gpio.index] === 1;
      else if (state === 3) level = true;
      else if (state === 4) level = false;
      if (level !== gpio.rawInputValue) gpio.setInputValue(level);
    };
    gpio.addListener((state) => {
      settle[gpio.index](state);
      for (const [pin, fn] of watchers) {
        if (pin === gpio.index) fn(state <= 1 ? state : null, api.nanos());
      }
    });
  }
  api.onPin = (pin, fn) => { watchers.push([pin, fn]); }; // fn(0, 1 or null = not driven, ns)
  api.line = (pin, fn) => { api.lines[pin] = fn; }; // fn(ns) -> level, for a PIO to read
  api.pin = (pin) => (mcu.gpio[pin].value <= 1 ? mcu.gpio[pin].value : null);
  api.drive = (pin, level) => { // from outside: 0, 1, or null for an open wire
    outside[pin] = level;
    settle[pin](mcu.gpio[pin].value);
  };
}

// State machines on the emulated clock, with dividers and delays; a change of FJOIN empties the
// FIFOs, and a receiving FIFO that is joined holds eight words. A pin whose level outside is a
// function of time (`api.line`) is seen through the input synchroniser; all others at once.
function correctPio(mcu, pio, api) {
  const { clock } = mcu;
  const stepNs = (machine) =>
    ((machine.clockDivInt || 65536) + machine.clockDivFrac / 256) * (1e9 / mcu.clkSys);
  const runs = (machine) => machine.enabled && !machine.waiting;
  const alarm = clock.createAlarm(() => batch());
  let inBatch = false;

  function arm() {
    let first = Infinity;
    for (const machine of pio.machines) if (runs(machine)) first = Math.min(first, machine.next);
    if (first < Infinity) alarm.schedule(Math.max(0, first - clock.nanosCounter));
  }
  function batch() {
    inBatch = true;
    const start = clock.nanosCounter;
    for (;;) {
      let next = null;
      for (const machine of pio.machines) {
        if (!runs(machine) || machine.next >= start + PIO_AHEAD_NS) continue;
        if (next === null || machine.next < next.next) next = machine;
      }
      if (next === null) break;
      if (next.next > clock.nanosCounter) clock.nanosCounter = next.next; // stamps the edges
      const before = next.cycles;
      next.step();
      next.next += (next.waiting ? 1 : Math.max(1, next.cycles - before)) * stepNs(next);
      pio.checkChangedPins();
    }
    clock.nanosCounter = start;
    inBatch = false;
    arm();
  }
  const seen = (pin) => {
    const line = api.lines[pin];
    if (line) return line(api.nanos() - SYNC_CYCLES * 1e9 / mcu.clkSys);
    return mcu.gpio[pin].inputValue;
  };
  for (const machine of pio.machines) {
    const Fifo = machine.rxFIFO.constructor;
    Object.defineProperty(machine, 'inPins', { get() {
      let pins = 0;
      for (let pin = 0; pin < 30; pin += 1) {
        if (seen(pin)) pins |= 1 << ((pin - machine.inBase) & 31);
      }
      return pins;
    } });
    machine.next = 0;
    const plainCheck = machine.checkWait.bind(machine);
    machine.checkWait = () => {
      if (!machine.waiting) return;
      const before = machine.cycles;
      plainCheck();
      if (machine.waiting) return;
      const resumes = clock.nanosCounter + (1 + machine.cycles - before) * stepNs(machine);
      machine.next = Math.max(machine.next, resumes);
      if (!inBatch) arm();
    };
    machine.clkDivRestart = () => { machine.next = clock.nanosCounter; };
    const plainWrite = machine.writeUint32.bind(machine);
    machine.writeUint32 = (offset, value) => {
      const joins = machine.shiftCtrl >>> 30;
      plainWrite(offset, value);
      if (machine.shiftCtrl >>> 30 !== joins) {
        machine.txFIFO.reset();
        machine.rxFIFO = new Fifo(machine.shiftCtrl >>> 31 ? 8 : 4);
        pio.rxStall &= ~(1 << machine.index);
        machine.updateDMARx();
      }
      pio.checkChangedPins();
      if (machine.enabled && !inBatch) arm();
    };
  }
  pio.run = () => {};
  const plainWrite = pio.writeUint32.bind(pio);
  pio.writeUint32 = (offset, value) => {
    const before = pio.machines.map((machine) => machine.enabled);
    plainWrite(offset, value);
    if (offset === 0) { // CTRL
      pio.machines.forEach((machine, index) => {
        if (machine.enabled && !before[index]) {
          machine.next = Math.max(machine.next, clock.nanosCounter);
        }
      });
      arm();
    }
    if (!inBatch) pio.checkChangedPins();
  };
}

// Registers that MicroPython touches at start and that rp2040js lacks.
function fillGaps(mcu, world) {
  const remember = (base, first = []) => {
    const words = new Map(first);
    mcu.peripherals[base].readUint32 = (offset) => words.get(offset & 0xfff) ?? 0;
    mcu.peripherals[base].writeUint32 = (offset, value) => words.set(offset & 0xfff, value >>> 0);
  };
  remember(0x40018); // QSPI pads
  remember(0x40064, [[8, 0x100]]); // VREG_AND_CHIP_RESET: HAD_POR

  // Ring oscillator: stable, with a seeded random bit, other ones at each boot.
  const rosc = mcu.peripherals[0x40060];
  const words = new Map();
  let random = 12345 + world.boot;
  rosc.readUint32 = (offset) => {
    if ((offset & 0xfff) === 0x18) return 0x80001000;
    if ((offset & 0xfff) !== 0x1c) return words.get(offset & 0xfff) ?? 0;
    random ^= random << 13;
    random ^= random >>> 17;
    random ^= random << 5;
    return random & 1;
  };
  rosc.writeUint32 = (offset, value) => { words.set(offset & 0xfff, value >>> 0); };

  // Core 1 does not run; only its "out of reset" word appears, for which MicroPython waits.
  const fifo = [];
  const sioRead = mcu.sio.readUint32.bind(mcu.sio);
  const sioWrite = mcu.sio.writeUint32.bind(mcu.sio);
  mcu.sio.readUint32 = (offset) => {
    if (offset === 0x50) return fifo.length ? 3 : 2;
    if (offset === 0x58) return fifo.length ? fifo.shift() : 0;
    return sioRead(offset);
  };
  mcu.sio.writeUint32 = (offset, value) => {
    if (offset !== 0x50 && offset !== 0x54) sioWrite(offset, value);
  };
  const psm = mcu.peripherals[0x40010];
  const psmWrite = psm.writeUint32.bind(psm);
  psm.writeUint32 = (offset, value) => {
    const before = psm.frceOff;
    psmWrite(offset, value);
    if (offset === 4 && before & ~value & (1 << 16)) {
      fifo.length = 0;
      fifo.push(0);
      mcu.core.eventRegistered = true;
    }
  };
}
