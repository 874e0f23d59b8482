"""A serial port's path for the emulated chip: a pseudo-terminal in front of its TCP link.

`python bridge.py PATH PORT`. PATH always exists; the TCP connection, which the chip sees as an
open port, is up only while a program holds PATH open. Where the chip drops the connection (a
reset) the pseudo-terminal hangs up and a fresh one takes PATH, as an unplugged port would.
"""

import os
import select
import signal
import socket
import sys
import time
import tty
from pathlib import Path

CHUNK = 4096
ENOUGH = 65536


def fresh_terminal(path: Path) -> int:
    master, slave = os.openpty()
    tty.setraw(slave)
    target = os.ttyname(slave)
    os.close(slave)
    os.set_blocking(master, False)
    beside = path.with_name(path.name + ".new")
    beside.unlink(missing_ok=True)
    beside.symlink_to(target)
    beside.replace(path)
    return master


def wait_for_program(master: int) -> None:
    """Until a program has the slave side open."""
    poll = select.poll()
    poll.register(master, select.POLLIN | select.POLLHUP)
    while True:
        events = poll.poll(50)
        if not events or not events[0][1] & select.POLLHUP:
            return
        time.sleep(0.002)


def carry(master: int, link: socket.socket) -> bool:
    """Carry bytes both ways until either side ends; True where the terminal must be renewed."""
    to_program = b""
    to_chip = b""
    while True:
        poll = select.poll()
        take = select.POLLIN if len(to_chip) < ENOUGH else 0
        poll.register(master, take | (select.POLLOUT if to_program else 0))
        take = select.POLLIN if len(to_program) < ENOUGH else 0
        poll.register(link, take | (select.POLLOUT if to_chip else 0))
        events = dict(poll.poll(1000))
        program = events.get(master, 0)
        chip = events.get(link.fileno(), 0)
        try:
            if program & select.POLLIN:
                to_chip += os.read(master, CHUNK)
            if to_chip and chip & select.POLLOUT:
                to_chip = to_chip[link.send(to_chip) :]
            if chip & (select.POLLIN | select.POLLHUP):
                got = link.recv(CHUNK)
                if not got:
                    return True
                to_program += got
            if to_program and program & select.POLLOUT:
                to_program = to_program[os.write(master, to_program) :]
        except BlockingIOError:
            pass
        except ConnectionError:
            return True
        except OSError:  # the program closed its side
            return bool(to_program)
        if program & select.POLLHUP and not program & select.POLLIN:
            return bool(to_program)


def main() -> None:
    path, port = Path(sys.argv[1]), int(sys.argv[2])
    signal.signal(signal.SIGTERM, lambda *_: sys.exit(0))
    master = fresh_terminal(path)
    try:
        while True:
            wait_for_program(master)
            try:
                link = socket.create_connection(("127.0.0.1", port))
            except OSError:
                time.sleep(0.1)
                continue
            link.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            with link:
                renew = carry(master, link)
            if renew:
                os.close(master)
                master = fresh_terminal(path)
    finally:
        path.unlink(missing_ok=True)


if __name__ == "__main__":
    main()
