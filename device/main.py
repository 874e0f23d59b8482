"""First the safe state, then the firmware.

A soft reset leaves pins as they were, so the first act is to drive every output low: pulse
off, contact open, bleed engaged. Then one of two slots is started:

    /a/tracer /a/kneewire   /b/tracer /b/kneewire   the slots, each whole
    /slot.txt               one line, "a confirmed" or "b 2": the slot to start, and whether a
                            host has confirmed it or how many trials it still has

A trial is counted down before its slot is imported, so a slot that hangs or resets the board
runs out of trials. With none left, or on any exception, the other slot is started. Without
slots and without /slot.txt (a development board) the packages in the root are started. Where
/slot.txt cannot be read or both slots are bad, the board stays safe and shows the prompt.
Ctrl-C always ends at the prompt.
"""

from machine import Pin


def safe_pins():
    # Literal numbers, because nothing else of the firmware may be needed to be safe.
    Pin(2, Pin.OUT, value=0)  # make and break: first, since its switch breaks fastest
    Pin(3, Pin.OUT, value=0)  # relay coil: contact open
    Pin(4, Pin.OUT, value=0)  # bleed release coil: bleed engaged


safe_pins()

import gc  # noqa: E402
import os  # noqa: E402
import sys  # noqa: E402

from machine import mem32  # noqa: E402

POINTER = "/slot.txt"


def exists(path):
    try:
        os.stat(path)
    except OSError:
        return False
    return True


def write_pointer(slot, mark):
    """Old or new survives a power cut at any point: littlefs renames over in one step."""
    with open("/slot.new", "w") as file:
        file.write(slot + " " + mark + "\n")
    os.rename("/slot.new", POINTER)


def slots():
    """Folders to start from, best first; counts a trial down."""
    if not exists(POINTER):
        if exists("/a") or exists("/b"):
            raise ValueError("slots, but no " + POINTER)
        return ("",)
    with open(POINTER) as file:
        slot, mark = file.read(64).split()
    other = {"a": "b", "b": "a"}[slot]
    if mark != "confirmed":
        trials = int(mark)
        if trials <= 0:
            write_pointer(other, "confirmed")
            return ("/" + other,)
        write_pointer(slot, str(trials - 1))
    return "/" + slot, "/" + other


def run(folder):
    if folder:
        # Checked, so that a slot with a package missing does not borrow one from the root.
        os.stat(folder + "/tracer")
        os.stat(folder + "/kneewire")
        sys.path.insert(0, folder)
    from tracer import app

    app.main()


def forget(folder):
    """Make room for the other slot's modules of the same names."""
    # Interrupt, converters and DMA still know memory that is about to be handed back.
    timer = getattr(sys.modules.get("tracer.ring_rp2"), "timer", None)
    if timer is not None:
        timer.deinit()
    mem32[0x50203000] = 0xF  # PIO0, PIO1: CTRL.SM_ENABLE cleared
    mem32[0x50303000] = 0xF
    mem32[0x4004F000] = 8  # ADC: CS.START_MANY cleared
    for channel in range(12):
        mem32[0x50000010 + 64 * channel] = 0  # DMA: AL1_CTRL, so that none starts again
    mem32[0x50000444] = 0xFFF  # CHAN_ABORT, all channels
    while mem32[0x50000444]:
        pass
    if folder in sys.path:
        sys.path.remove(folder)
    for name in list(sys.modules):
        if name.split(".")[0] in ("tracer", "kneewire"):
            del sys.modules[name]
    gc.collect()


def start():
    try:
        folders = slots()
    except (OSError, ValueError, KeyError) as error:
        print("Kneewise: which slot to start cannot be read; outputs are safe")
        sys.print_exception(error)
        return
    for folder in folders:
        try:
            return run(folder)
        except Exception as error:
            safe_pins()
            print("Kneewise: the firmware in", folder or "/", "stopped; outputs are safe")
            sys.print_exception(error)
        forget(folder)


try:
    start()
finally:
    try:
        safe_pins()
    finally:
        safe_pins()  # again, where a second Ctrl-C cut the first short
