"""What the emulated process runs at power-on: its folder becomes the board's whole file system,
then `main.py` starts as on a board."""

import os
import sys

import vfs

vfs.umount("/")
vfs.mount(vfs.VfsPosix(os.getenv("KNEEWISE_FLASH")), "/")
os.chdir("/")
sys.path[:] = ["", "/lib"]

import main  # noqa: E402, F401
