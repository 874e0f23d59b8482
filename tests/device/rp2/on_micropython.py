"""Goes with the model and the checks into a MicroPython process, and runs checks there.

Called with a file of lines "FOLDER FILE.FUNCTION ..."; FOLDER has the firmware as `from_text.py`
gives it, in tracer/. Prints a line for each: "passed", or "failed" and what the first check that
failed has raised.
"""

import builtins
import sys

from board import Board

modules, path = sys.modules, sys.path


class Loader:
    def __init__(self, folder):
        self.folder = folder

    def begin(self, fakes, pointers, heap):
        for name in list(modules):
            if name.split(".")[0] == "tracer":
                del modules[name]
        for name, fake in fakes.items():
            modules[name] = fake
        for name, pointer in pointers.items():
            setattr(builtins, name, pointer)
        path[0] = self.folder

    def load(self, name):
        __import__("tracer." + name)
        return modules["tracer." + name]


def run(folder, checks):
    loader = Loader(folder)

    def new(before=None, heap=None):
        return Board(loader, before, heap)

    for check in checks:
        file, function = check.split(".")
        try:
            getattr(__import__("checks_" + file), function)(new)
        except Exception as error:
            return f"failed {check} {type(error).__name__} {error}"
    return "passed"


def main(jobs):
    path.insert(0, "")
    with open(jobs) as file:
        lines = file.read().split("\n")
    for line in lines:
        folder, *checks = line.split(" ")
        print(run(folder, checks))
