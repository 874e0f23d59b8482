// The processor: a Cortex-M0+ interpreter over the memory of an rp2040js RP2040 object, four times
// as fast as that program's own, with the same peripherals and the same count of cycles.
//
// Comes in: a chip, and the time to run to. Goes out: executed instructions, in slices that end
// at the next alarm, so that a peripheral acts at its own time. Dense on purpose: one line is
// one form of instruction of the ARMv6-M manual, its order that of the decode table below.
//
// Import one copy for each chip ("core.mjs?boot=1"), so that the compiler sees one shape only.
//
// fn, fz, fc, fv hold the flags unevaluated: N is fn < 0, Z is fz === 0, C is fc, V is fv < 0.
export function makeCore(mcu) {
  const core = mcu.core, clock = mcu.clock;
  const R = new Int32Array(core.registers.buffer);
  const ram8 = mcu.sram, ram16 = new Uint16Array(ram8.buffer), ram32 = new Int32Array(ram8.buffer);
  const fl8 = mcu.flash, fl16 = new Uint16Array(fl8.buffer), fl32 = new Int32Array(fl8.buffer);
  const rom8 = new Uint8Array(mcu.bootrom.buffer), rom16 = new Uint16Array(mcu.bootrom.buffer), rom32 = new Int32Array(mcu.bootrom.buffer);
  const RAMSZ = ram8.length;
  let limit = 0; // cycles left in this slice
  let sliceStart = 0, cns = 8, clk = 0; // ns; ns a cycle; Hz

  // ---- the form of each instruction: one number for each of the 65536 opcodes ----
  const DEC = new Uint8Array(65536);
  for (let op = 0; op < 65536; op++) {
    const t5 = op >> 11; let h = 0;
    if (t5 === 0) h = (op >> 6) & 31 ? 1 : 2;
    else if (t5 === 1) h = 3; else if (t5 === 2) h = 4;
    else if (t5 === 3) h = 5 + ((op >> 9) & 3);
    else if (t5 < 8) h = 9 + (t5 - 4);
    else if (op >> 10 === 0b010000) h = 13 + ((op >> 6) & 15);
    else if (op >> 10 === 0b010001) {
      const k = (op >> 8) & 3;
      if (k === 0) h = 29; else if (k === 1) h = 30;
      else if (k === 2) { const rd = ((op >> 4) & 8) | (op & 7), rm = (op >> 3) & 15; h = rd === 15 || rd === 13 || rm === 15 ? 31 : 88; }
      else h = op & 0x80 ? 33 : 32;
    } else if (t5 === 0b01001) h = 34;
    else if (op >> 12 === 0b0101) h = 35 + ((op >> 9) & 7);
    else if (t5 >= 12 && t5 <= 17) h = 43 + (t5 - 12);
    else if (t5 === 18) h = 49; else if (t5 === 19) h = 50;
    else if (t5 === 20) h = 51; else if (t5 === 21) h = 52;
    else if (op >> 7 === 0b101100000) h = 53; else if (op >> 7 === 0b101100001) h = 54;
    else if (op >> 8 === 0xb2) h = 55 + ((op >> 6) & 3);
    else if (op >> 9 === 0b1011010) h = 59;
    else if (op >> 8 === 0xbc) h = 60; else if (op >> 8 === 0xbd) h = 61;
    else if (op === 0xb662 || op === 0xb672) h = 62;
    else if (op >> 6 === 0b1011101000) h = 63; else if (op >> 6 === 0b1011101001) h = 64; else if (op >> 6 === 0b1011101011) h = 65;
    else if (op >> 8 === 0xbe) h = 66; else if (op >> 8 === 0xbf) h = 67;
    else if (t5 === 24) h = 68; else if (t5 === 25) h = 69;
    else if (op >> 12 === 0xd) { const c = (op >> 8) & 15; h = c < 14 ? 70 + c : c === 14 ? 84 : 85; }
    else if (t5 === 28) h = 86; else if (t5 === 30) h = 87;
    DEC[op] = h;
  }

  // ---- memory that is not plain: peripherals, SIO, PPB, USB RAM, aliases ----
  function after(cyc) {
    if (core.interruptsUpdated || core.waiting || mcu.clkSys !== clk) { limit = 0; return; }
    const na = clock.nextAlarm;
    if (na !== null) { const l = Math.ceil((na.nanos - sliceStart) / cns); if (l < limit) limit = l; }
  }
  function s_ld32(a, cyc) { clock.nanosCounter = sliceStart + cyc * cns; const v = mcu.readUint32(a >>> 0) | 0; after(cyc); return v; }
  function s_ld16(a, cyc) { clock.nanosCounter = sliceStart + cyc * cns; const v = mcu.readUint16(a >>> 0) | 0; after(cyc); return v; }
  function s_ld8(a, cyc) { clock.nanosCounter = sliceStart + cyc * cns; const v = mcu.readUint8(a >>> 0) | 0; after(cyc); return v; }
  function s_st32(a, v, cyc) { clock.nanosCounter = sliceStart + cyc * cns; mcu.writeUint32(a >>> 0, v >>> 0); after(cyc); }
  function s_st16(a, v, cyc) { clock.nanosCounter = sliceStart + cyc * cns; mcu.writeUint16(a >>> 0, v & 0xffff); after(cyc); }
  function s_st8(a, v, cyc) { clock.nanosCounter = sliceStart + cyc * cns; mcu.writeUint8(a >>> 0, v & 0xff); after(cyc); }

  // ---- memory: RAM, flash and ROM directly, all else by the paths above ----
  function ld32(a, cyc) {
    const t = a >>> 24, o = a & 0xffffff;
    if (t === 0x20) { if (o < RAMSZ) return ram32[o >>> 2]; }
    else if (t === 0x10) return fl32[o >>> 2];
    else if (t === 0 && o < 0x4000) return rom32[o >>> 2];
    return s_ld32(a, cyc);
  }
  function ld16(a, cyc) {
    const t = a >>> 24, o = a & 0xffffff;
    if (t === 0x20) { if (o < RAMSZ) return ram16[o >>> 1]; }
    else if (t === 0x10) return fl16[o >>> 1];
    else if (t === 0 && o < 0x4000) return rom16[o >>> 1];
    return s_ld16(a, cyc);
  }
  function ld8(a, cyc) {
    const t = a >>> 24, o = a & 0xffffff;
    if (t === 0x20) { if (o < RAMSZ) return ram8[o]; }
    else if (t === 0x10) return fl8[o];
    else if (t === 0 && o < 0x4000) return rom8[o];
    return s_ld8(a, cyc);
  }
  function st32(a, v, cyc) { const o = a & 0xffffff; if (a >>> 24 === 0x20 && o < RAMSZ) ram32[o >>> 2] = v; else s_st32(a, v, cyc); }
  function st16(a, v, cyc) { const o = a & 0xffffff; if (a >>> 24 === 0x20 && o < RAMSZ) ram16[o >>> 1] = v; else s_st16(a, v, cyc); }
  function st8(a, v, cyc) { const o = a & 0xffffff; if (a >>> 24 === 0x20 && o < RAMSZ) ram8[o] = v; else s_st8(a, v, cyc); }

  // ---- one slice: executes until `limit` cycles are used up; returns cycles used ----
  function slice() {
    let pc = R[15] & ~1, cyc = 0;
    let fn = core.N ? -1 : 0, fz = core.Z ? 0 : 1, fc = core.C ? 1 : 0, fv = core.V ? -1 : 0;
    let cm = fl16, mask = 0xffffff;
    { const t = pc >>> 28; if (t === 1) { cm = fl16; mask = 0xffffff; } else if (t === 2) { cm = ram16; mask = 0x7ffff; } else { cm = rom16; mask = 0x3fff; } }
    while (cyc < limit) {
      const op = cm[(pc & mask) >>> 1];
      pc = (pc + 2) | 0; cyc++;
      switch (DEC[op]) {
        // shifts by a number, moves
        case 1: { const s = (op >> 6) & 31, v = R[(op >> 3) & 7], r = v << s; fc = (v >>> (32 - s)) & 1; R[op & 7] = r; fn = fz = r; break; }
        case 2: { const r = R[(op >> 3) & 7]; R[op & 7] = r; fn = fz = r; break; }
        case 3: { const s = (op >> 6) & 31, v = R[(op >> 3) & 7]; let r; if (s) { r = (v >>> s) | 0; fc = (v >>> (s - 1)) & 1; } else { r = 0; fc = v >>> 31; } R[op & 7] = r; fn = fz = r; break; }
        case 4: { const s = (op >> 6) & 31, v = R[(op >> 3) & 7]; let r; if (s) { r = v >> s; fc = (v >> (s - 1)) & 1; } else { r = v >> 31; fc = r & 1; } R[op & 7] = r; fn = fz = r; break; }
        // add, subtract; immediate forms
        case 5: { const a = R[(op >> 3) & 7], b = R[(op >> 6) & 7], r = (a + b) | 0; fc = r >>> 0 < a >>> 0 ? 1 : 0; fv = (a ^ r) & (b ^ r); R[op & 7] = r; fn = fz = r; break; }
        case 6: { const a = R[(op >> 3) & 7], b = R[(op >> 6) & 7], r = (a - b) | 0; fc = a >>> 0 >= b >>> 0 ? 1 : 0; fv = (a ^ b) & (a ^ r); R[op & 7] = r; fn = fz = r; break; }
        case 7: { const a = R[(op >> 3) & 7], b = (op >> 6) & 7, r = (a + b) | 0; fc = r >>> 0 < a >>> 0 ? 1 : 0; fv = (a ^ r) & (b ^ r); R[op & 7] = r; fn = fz = r; break; }
        case 8: { const a = R[(op >> 3) & 7], b = (op >> 6) & 7, r = (a - b) | 0; fc = a >>> 0 >= b ? 1 : 0; fv = (a ^ b) & (a ^ r); R[op & 7] = r; fn = fz = r; break; }
        case 9: { const r = op & 0xff; R[(op >> 8) & 7] = r; fn = fz = r; break; }
        case 10: { const a = R[(op >> 8) & 7], b = op & 0xff, r = (a - b) | 0; fc = a >>> 0 >= b ? 1 : 0; fv = (a ^ b) & (a ^ r); fn = fz = r; break; }
        case 11: { const d = (op >> 8) & 7, a = R[d], b = op & 0xff, r = (a + b) | 0; fc = r >>> 0 < a >>> 0 ? 1 : 0; fv = (a ^ r) & (b ^ r); R[d] = r; fn = fz = r; break; }
        case 12: { const d = (op >> 8) & 7, a = R[d], b = op & 0xff, r = (a - b) | 0; fc = a >>> 0 >= b ? 1 : 0; fv = (a ^ b) & (a ^ r); R[d] = r; fn = fz = r; break; }
        // register with register
        case 13: { const d = op & 7, r = R[d] & R[(op >> 3) & 7]; R[d] = r; fn = fz = r; break; }
        case 14: { const d = op & 7, r = R[d] ^ R[(op >> 3) & 7]; R[d] = r; fn = fz = r; break; }
        case 15: { const d = op & 7, s = R[(op >> 3) & 7] & 0xff; let v = R[d]; if (s) { if (s < 32) { fc = (v >>> (32 - s)) & 1; v = v << s; } else { fc = s === 32 ? v & 1 : 0; v = 0; } } R[d] = v; fn = fz = v; break; }
        case 16: { const d = op & 7, s = R[(op >> 3) & 7] & 0xff; let v = R[d]; if (s) { if (s < 32) { fc = (v >>> (s - 1)) & 1; v = (v >>> s) | 0; } else { fc = s === 32 ? v >>> 31 : 0; v = 0; } } R[d] = v; fn = fz = v; break; }
        case 17: { const d = op & 7, s = R[(op >> 3) & 7] & 0xff; let v = R[d]; if (s) { if (s < 32) { fc = (v >> (s - 1)) & 1; v = v >> s; } else { v = v >> 31; fc = v & 1; } } R[d] = v; fn = fz = v; break; }
        case 18: { const d = op & 7, a = R[d], b = R[(op >> 3) & 7], r = (a + b + fc) | 0; fc = (a >>> 0) + (b >>> 0) + fc > 4294967295 ? 1 : 0; fv = (a ^ r) & (b ^ r); R[d] = r; fn = fz = r; break; }
        case 19: { const d = op & 7, a = R[d], b = ~R[(op >> 3) & 7], r = (a + b + fc) | 0; fc = (a >>> 0) + (b >>> 0) + fc > 4294967295 ? 1 : 0; fv = (a ^ r) & (b ^ r); R[d] = r; fn = fz = r; break; }
        case 20: { const d = op & 7, s0 = R[(op >> 3) & 7] & 0xff, s = s0 & 31; let v = R[d]; if (s0) { if (s) v = (v >>> s) | (v << (32 - s)); fc = v >>> 31; } R[d] = v; fn = fz = v; break; }
        case 21: { const r = R[op & 7] & R[(op >> 3) & 7]; fn = fz = r; break; }
        case 22: { const b = R[(op >> 3) & 7], r = -b | 0; fc = b === 0 ? 1 : 0; fv = b & r; R[op & 7] = r; fn = fz = r; break; }
        case 23: { const a = R[op & 7], b = R[(op >> 3) & 7], r = (a - b) | 0; fc = a >>> 0 >= b >>> 0 ? 1 : 0; fv = (a ^ b) & (a ^ r); fn = fz = r; break; }
        case 24: { const a = R[op & 7], b = R[(op >> 3) & 7], r = (a + b) | 0; fc = r >>> 0 < a >>> 0 ? 1 : 0; fv = (a ^ r) & (b ^ r); fn = fz = r; break; }
        case 25: { const d = op & 7, r = R[d] | R[(op >> 3) & 7]; R[d] = r; fn = fz = r; break; }
        case 26: { const d = op & 7, r = Math.imul(R[d], R[(op >> 3) & 7]); R[d] = r; fn = fz = r; break; }
        case 27: { const d = op & 7, r = R[d] & ~R[(op >> 3) & 7]; R[d] = r; fn = fz = r; break; }
        case 28: { const r = ~R[(op >> 3) & 7]; R[op & 7] = r; fn = fz = r; break; }
        // high registers and branches by register
        case 29: { // ADD hi
          const m = (op >> 3) & 15, d = ((op >> 4) & 8) | (op & 7);
          const r = ((d === 15 ? pc + 2 : R[d]) + (m === 15 ? pc + 2 : R[m])) | 0;
          if (d === 15) { pc = r & ~1; cyc++; const t = pc >>> 28; if (t === 1) { cm = fl16; mask = 0xffffff; } else if (t === 2) { cm = ram16; mask = 0x7ffff; } else { cm = rom16; mask = 0x3fff; } }
          else R[d] = d === 13 ? r & ~3 : r;
          break;
        }
        case 30: { const m = (op >> 3) & 15, d = ((op >> 4) & 8) | (op & 7); const a = R[d], b = m === 15 ? (pc + 2) | 0 : R[m], r = (a - b) | 0; fc = a >>> 0 >= b >>> 0 ? 1 : 0; fv = (a ^ b) & (a ^ r); fn = fz = r; break; }
        case 31: {
          const m = (op >> 3) & 15, d = ((op >> 4) & 8) | (op & 7); const v = m === 15 ? (pc + 2) | 0 : R[m];
          if (d === 15) { pc = v & ~1; cyc++; const t = pc >>> 28; if (t === 1) { cm = fl16; mask = 0xffffff; } else if (t === 2) { cm = ram16; mask = 0x7ffff; } else { cm = rom16; mask = 0x3fff; } }
          else R[d] = d === 13 ? v & ~3 : v;
          break;
        }
        case 88: { R[((op >> 4) & 8) | (op & 7)] = R[(op >> 3) & 15]; break; }
        case 32: case 61: case 33: { // BX / POP {..,pc} / BLX
          let t;
          const h = DEC[op];
          if (h === 61) {
            let a = R[13];
            for (let i = 0, m = op & 0xff; m !== 0; i++, m >>= 1) if (m & 1) { R[i] = ld32(a, cyc); a = (a + 4) | 0; cyc++; }
            t = ld32(a, cyc); R[13] = (a + 4) | 0; cyc += 3;
          } else {
            t = R[(op >> 3) & 15]; cyc++;
            if (h === 33) R[14] = pc | 1;
          }
          if (t >>> 28 === 0xf && h !== 33 && core.currentMode === 1) {
            R[15] = pc; core.N = fn < 0; core.Z = fz === 0; core.C = fc !== 0; core.V = fv < 0;
            core.exceptionReturn(t & 0x0fffffff);
            pc = R[15] & ~1; cyc += 10; limit = 0;
            fn = core.N ? -1 : 0; fz = core.Z ? 0 : 1; fc = core.C ? 1 : 0; fv = core.V ? -1 : 0;
          } else pc = t & ~1;
          const q = pc >>> 28; if (q === 1) { cm = fl16; mask = 0xffffff; } else if (q === 2) { cm = ram16; mask = 0x7ffff; } else { cm = rom16; mask = 0x3fff; }
          break;
        }
        // load and store, by the program counter, register, number, stack
        case 34: { R[(op >> 8) & 7] = ld32((((pc + 2) & ~3) + ((op & 0xff) << 2)) | 0, cyc); cyc++; break; }
        case 35: { st32((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, R[op & 7], cyc); cyc++; break; }
        case 36: { st16((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, R[op & 7], cyc); cyc++; break; }
        case 37: { st8((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, R[op & 7], cyc); cyc++; break; }
        case 38: { R[op & 7] = (ld8((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, cyc) << 24) >> 24; cyc++; break; }
        case 39: { R[op & 7] = ld32((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, cyc); cyc++; break; }
        case 40: { R[op & 7] = ld16((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, cyc); cyc++; break; }
        case 41: { R[op & 7] = ld8((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, cyc); cyc++; break; }
        case 42: { R[op & 7] = (ld16((R[(op >> 6) & 7] + R[(op >> 3) & 7]) | 0, cyc) << 16) >> 16; cyc++; break; }
        case 43: { st32((R[(op >> 3) & 7] + ((op >> 4) & 0x7c)) | 0, R[op & 7], cyc); cyc++; break; }
        case 44: { R[op & 7] = ld32((R[(op >> 3) & 7] + ((op >> 4) & 0x7c)) | 0, cyc); cyc++; break; }
        case 45: { st8((R[(op >> 3) & 7] + ((op >> 6) & 31)) | 0, R[op & 7], cyc); cyc++; break; }
        case 46: { R[op & 7] = ld8((R[(op >> 3) & 7] + ((op >> 6) & 31)) | 0, cyc); cyc++; break; }
        case 47: { st16((R[(op >> 3) & 7] + ((op >> 5) & 0x3e)) | 0, R[op & 7], cyc); cyc++; break; }
        case 48: { R[op & 7] = ld16((R[(op >> 3) & 7] + ((op >> 5) & 0x3e)) | 0, cyc); cyc++; break; }
        case 49: { st32((R[13] + ((op & 0xff) << 2)) | 0, R[(op >> 8) & 7], cyc); cyc++; break; }
        case 50: { R[(op >> 8) & 7] = ld32((R[13] + ((op & 0xff) << 2)) | 0, cyc); cyc++; break; }
        // addresses from the program counter and the stack pointer
        case 51: { R[(op >> 8) & 7] = ((pc + 2) & ~3) + ((op & 0xff) << 2); break; }
        case 52: { R[(op >> 8) & 7] = R[13] + ((op & 0xff) << 2); break; }
        case 53: { R[13] = R[13] + ((op & 0x7f) << 2); break; }
        case 54: { R[13] = R[13] - ((op & 0x7f) << 2); break; }
        // extend
        case 55: { R[op & 7] = (R[(op >> 3) & 7] << 16) >> 16; break; }
        case 56: { R[op & 7] = (R[(op >> 3) & 7] << 24) >> 24; break; }
        case 57: { R[op & 7] = R[(op >> 3) & 7] & 0xffff; break; }
        case 58: { R[op & 7] = R[(op >> 3) & 7] & 0xff; break; }
        // push, pop
        case 59: { // PUSH, highest register first, descending
          let a = R[13];
          if (op & 0x100) { a = (a - 4) | 0; st32(a, R[14], cyc); cyc++; }
          for (let i = 7, m = op & 0xff; i >= 0; i--) if (m & (1 << i)) { a = (a - 4) | 0; st32(a, R[i], cyc); cyc++; }
          R[13] = a; break;
        }
        case 60: { let a = R[13]; for (let i = 0, m = op & 0xff; m !== 0; i++, m >>= 1) if (m & 1) { R[i] = ld32(a, cyc); a = (a + 4) | 0; cyc++; } R[13] = a; break; }
        // interrupt mask, reverse, breakpoint, hints
        case 62: {
          if (op & 0x10) core.PM = true;
          else { core.PM = false; if ((core.pendingInterrupts & core.enabledInterrupts) || core.pendingPendSV || core.pendingSystick || core.pendingSVCall) { core.interruptsUpdated = true; limit = 0; } }
          break;
        }
        case 63: { const v = R[(op >> 3) & 7]; R[op & 7] = (v << 24) | ((v & 0xff00) << 8) | ((v >>> 8) & 0xff00) | (v >>> 24); break; }
        case 64: { const v = R[(op >> 3) & 7]; R[op & 7] = ((v & 0x00ff00ff) << 8) | ((v >>> 8) & 0x00ff00ff); break; }
        case 65: { const v = R[(op >> 3) & 7]; R[op & 7] = (((v & 0xff) << 24) >> 16) | ((v >>> 8) & 0xff); break; }
        case 66: {
          R[15] = pc; core.N = fn < 0; core.Z = fz === 0; core.C = fc !== 0; core.V = fv < 0;
          clock.nanosCounter = sliceStart + cyc * cns; core.breakRewind = 2;
          const extra = mcu.onBreak(op & 0xff);
          if (typeof extra === 'number') cyc += extra;
          pc = R[15]; after(cyc); break;
        }
        case 67: {
          const k = (op >> 4) & 15;
          if (k === 2) { cyc++; if (core.eventRegistered) core.eventRegistered = false; else { core.waiting = true; limit = 0; } }
          else if (k === 3) { cyc++; core.waiting = true; limit = 0; }
          else if (k === 4) core.eventRegistered = true;
          break;
        }
        // several registers
        case 68: { const b = (op >> 8) & 7; let a = R[b]; for (let i = 0, m = op & 0xff; m !== 0; i++, m >>= 1) if (m & 1) { st32(a, R[i], cyc); a = (a + 4) | 0; cyc++; } R[b] = a; break; }
        case 69: { const b = (op >> 8) & 7; let a = R[b]; for (let i = 0, m = op & 0xff; m !== 0; i++, m >>= 1) if (m & 1) { R[i] = ld32(a, cyc); a = (a + 4) | 0; cyc++; } if (!(op & (1 << b))) R[b] = a; break; }
        // conditional branches
        case 70: if (fz === 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 71: if (fz !== 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 72: if (fc !== 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 73: if (fc === 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 74: if (fn < 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 75: if (fn >= 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 76: if (fv < 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 77: if (fv >= 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 78: if (fc !== 0 && fz !== 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 79: if (fc === 0 || fz === 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 80: if ((fn ^ fv) >= 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 81: if ((fn ^ fv) < 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 82: if (fz !== 0 && (fn ^ fv) >= 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        case 83: if (fz === 0 || (fn ^ fv) < 0) { pc = (pc + 2 + ((op << 24) >> 23)) | 0; cyc++; } break;
        // branch, supervisor call, 32-bit forms
        case 86: pc = (pc + 2 + ((op << 21) >> 20)) | 0; cyc++; break;
        case 85: core.pendingSVCall = true; core.interruptsUpdated = true; limit = 0; break;
        case 87: {
          const op2 = cm[(pc & mask) >>> 1];
          pc = (pc + 2) | 0;
          if ((op2 & 0xd000) === 0xd000) { // BL
            const S = (op >> 10) & 1, I1 = 1 - (S ^ ((op2 >> 13) & 1)), I2 = 1 - (S ^ ((op2 >> 11) & 1));
            const off = ((S ? 0xff << 24 : 0) | (I1 << 23) | (I2 << 22) | ((op & 0x3ff) << 12) | ((op2 & 0x7ff) << 1)) | 0;
            R[14] = pc | 1; pc = (pc + off) | 0; cyc += 2;
            const q = pc >>> 28; if (q === 1) { cm = fl16; mask = 0xffffff; } else if (q === 2) { cm = ram16; mask = 0x7ffff; } else { cm = rom16; mask = 0x3fff; }
          } else if (op === 0xf3ef) { // MRS
            core.N = fn < 0; core.Z = fz === 0; core.C = fc !== 0; core.V = fv < 0;
            R[(op2 >> 8) & 15] = core.readSpecialRegister(op2 & 0xff); cyc += 2;
          } else if ((op & 0xfff0) === 0xf380) { // MSR
            core.N = fn < 0; core.Z = fz === 0; core.C = fc !== 0; core.V = fv < 0;
            const sys = op2 & 0xff, v = R[op & 15];
            if (sys === 16) {
              core.PM = !!(v & 1);
              if (!core.PM && ((core.pendingInterrupts & core.enabledInterrupts) || core.pendingPendSV || core.pendingSystick || core.pendingSVCall)) { core.interruptsUpdated = true; limit = 0; }
            } else core.writeSpecialRegister(sys, v >>> 0);
            fn = core.N ? -1 : 0; fz = core.Z ? 0 : 1; fc = core.C ? 1 : 0; fv = core.V ? -1 : 0; cyc += 2;
          } else if (op === 0xf3bf) cyc += 2; // DMB/DSB/ISB
          else { R[15] = pc; limit = 0; api.fault(`undefined 32-bit opcode ${op.toString(16)} ${op2.toString(16)} at ${((pc - 4) >>> 0).toString(16)}`); }
          break;
        }
        default:
          R[15] = pc; limit = 0; api.fault(`undefined opcode ${op} at 0x${((pc - 2) >>> 0).toString(16)}`);
      }
    }
    R[15] = pc; core.N = fn < 0; core.Z = fz === 0; core.C = fc !== 0; core.V = fv < 0;
    core.cycles += cyc;
    return cyc;
  }

  // level-style interrupt lines; never enters the exception from inside a peripheral write
  core.setInterrupt = function (irq, value) {
    const bit = 1 << irq;
    if (value) { if (!(this.pendingInterrupts & bit)) { this.pendingInterrupts |= bit; this.interruptsUpdated = true; } }
    else this.pendingInterrupts &= ~bit;
  };

  const MAXSLICE = 20000;
  const api = {
    fault(msg) { throw new Error(msg); },
    stop: false,
    // run until clock.nanos >= untilNanos, or api.stop
    run(untilNanos) {
      while (clock.nanosCounter < untilNanos && !api.stop) {
        if (core.waiting) {
          if (core.pendingInterrupts & core.enabledInterrupts || core.pendingPendSV || core.pendingSystick || core.pendingNMI) core.waiting = false;
          else {
            const na = clock.nextAlarm;
            let d = untilNanos - clock.nanosCounter;
            if (na !== null && na.nanos - clock.nanosCounter < d) d = Math.max(0, na.nanos - clock.nanosCounter);
            clock.tick(d);
            continue;
          }
        }
        if (core.interruptsUpdated) {
          if (core.checkForInterrupts()) { clock.tick(15 * cns); core.interruptsUpdated = true; }
        }
        clk = mcu.clkSys; cns = 1e9 / clk;
        sliceStart = clock.nanosCounter;
        const na = clock.nextAlarm;
        let l = Math.ceil((untilNanos - sliceStart) / cns);
        if (l > MAXSLICE) l = MAXSLICE;
        if (na !== null) { const k = Math.ceil((na.nanos - sliceStart) / cns); if (k < l) l = k; }
        if (l < 1) l = 1;
        limit = l;
        const used = slice();
        const target = sliceStart + used * cns;
        clock.tick(target - clock.nanosCounter);
      }
    },
  };
  return api;
}
