"""The circuit simulator at its fastest: one process, one circuit, its parameters altered in place.

One stage with level-1 transistors is read once. For each design its sizes are altered (widths, lengths, junctions,
lambda with the length, resistors and what they load, bias), and the analyses of a script run, see `scripts` and
`catalogue`; nobody reads their results. The simulator's shared library is driven where there is one, since the command
loop of the program takes longer. Times are of the processor, without start-up.
"""

from __future__ import annotations

import ctypes
import ctypes.util
import json
import resource
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from tests.benchmarks.scripts import Script

HERE = Path(__file__).resolve().parents[2]


def by_program(ngspice: str, script: Script, count: int, repeats: int = 3) -> float:
    """Return the processor seconds a design in the program's batch mode: the difference of two lengths of one deck."""
    few = max(count // 4, 1)
    with tempfile.TemporaryDirectory() as folder:

        def spent(designs: int) -> float:
            control = [".control", *script.commands(designs), "quit", ".endc", ".end"]
            (Path(folder) / "deck.sp").write_text("\n".join([*script.deck, *control]) + "\n", encoding="ascii")
            before = resource.getrusage(resource.RUSAGE_CHILDREN)
            command = [ngspice, "-b", "-n", "deck.sp"]
            subprocess.run(command, cwd=folder, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, check=False)
            after = resource.getrusage(resource.RUSAGE_CHILDREN)
            return after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime

        differences = [spent(count) - spent(few) for _ in range(repeats)]
    return min(differences) / (count - few)


def by_library(script: Script, count: int, repeats: int = 3) -> float | None:
    """Return the processor seconds a design through the shared library, in a process of its own; None without it."""
    if ctypes.util.find_library("ngspice") is None:
        return None
    job = {"deck": [*script.deck, ".end"], "commands": script.commands(count), "repeats": repeats}
    command = [sys.executable, "-m", "tests.benchmarks.simulator"]
    done = subprocess.run(command, cwd=HERE, input=json.dumps(job), capture_output=True, text=True, check=True)
    return float(json.loads(done.stdout.splitlines()[-1])) / count


def fastest(ngspice: str, script: Script, count: int, repeats: int = 3) -> tuple[float, str]:
    """Return the processor seconds a design of the fastest way that this machine has, and what way that is."""
    library = by_library(script, count, repeats)
    if library is not None:
        return library, "shared library"
    return by_program(ngspice, script, count, repeats), "program in batch mode"


def _drive_library() -> None:
    """Run one job from the standard input in this process: read the deck, time the commands, print the least time."""
    job = json.load(sys.stdin)
    library = ctypes.CDLL(ctypes.util.find_library("ngspice"))
    said = ctypes.CFUNCTYPE(ctypes.c_int, ctypes.c_char_p, ctypes.c_int, ctypes.c_void_p)
    ended = ctypes.CFUNCTYPE(ctypes.c_int, ctypes.c_int, ctypes.c_bool, ctypes.c_bool, ctypes.c_int, ctypes.c_void_p)
    leave = ended(lambda *_: 0)
    heard: list[bytes] = []

    def listen(text: bytes, *_: object) -> int:
        heard.append(text)
        return 0

    hear = said(listen)
    library.ngSpice_Init(hear, None, leave, None, None, None, None)
    lines = [line.encode() for text in job["deck"] for line in text.split("\n")]
    if library.ngSpice_Circ((ctypes.c_char_p * (len(lines) + 1))(*lines, None)):
        raise RuntimeError(b"\n".join(heard[-20:]).decode())
    library.ngSpice_Init(None, None, leave, None, None, None, None)  # from here on without a call a line of output
    commands = [command.encode() for command in job["commands"]]
    command, nothing = library.ngSpice_Command, ctypes.CDLL(None).strlen  # the second: what the loop itself takes
    command.argtypes = nothing.argtypes = [ctypes.c_char_p]

    def spent(call: object) -> float:
        begin = time.process_time()
        for text in commands:
            call(text)  # type: ignore[operator]
        return time.process_time() - begin

    spent(command)  # the first time fills the memory pools
    print(json.dumps(min(spent(command) for _ in range(job["repeats"])) - min(spent(nothing) for _ in range(3))))


if __name__ == "__main__":
    _drive_library()
