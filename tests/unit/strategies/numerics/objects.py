#!/usr/bin/env python3
"""Looks into the compiled numerics levels: no fused multiply-add, nothing but the table for the linker,
no instruction above the level.

Usage: objects.py LEVEL=OBJECT... (the object file of kernels.cc for each level). Needs binutils.
"""

import re
import subprocess
import sys

# Registers that a level may name; scalar and sse2 are the x86-64 baseline.
FORBIDDEN = {
    "scalar": r"%[yz]mm|\bv[a-z0-9]+\s",
    "sse2": r"%[yz]mm|\bv[a-z0-9]+\s",
    "avx2": r"%zmm|%k[0-7]|%[xy]mm(1[6-9]|2\d|3[01])",
    "avx512": r"(?!)",
}
FUSED = re.compile(r"\bvf(n?m(add|sub)|madd|msub)")


def run(*command):
    return subprocess.run(command, check=True, capture_output=True, text=True).stdout


def problems_of(level, path):
    code = run("objdump", "--disassemble", "--no-show-raw-insn", path).splitlines()
    instructions = [line.split("\t", 1)[1] for line in code if "\t" in line]
    if len(instructions) < 500:
        yield f"only {len(instructions)} instructions: is this the right file?"
    for text in instructions:
        if FUSED.search(text):
            yield f"fused multiply-add: {text}"
        if re.search(FORBIDDEN[level], text.split("#")[0]):
            yield f"not of this level: {text}"
    visible = [line.split() for line in run("nm", "--defined-only", path).splitlines()]
    names = [(kind, name) for *_, kind, name in visible if kind.isupper() or kind in "vwu"]
    if len(names) != 1 or f"kernels_{level}" not in names[0][1]:
        yield f"the linker sees {names}, not the table alone"


def main():
    failed = False
    if len(sys.argv) < 2:
        sys.exit(__doc__)
    for argument in sys.argv[1:]:
        level, path = argument.split("=", 1)
        found = list(problems_of(level, path))
        print(f"{level:7} {'ok' if not found else f'{len(found)} problems'}")
        for problem in found[:5]:
            print(f"    {problem}")
        failed = failed or bool(found)
    sys.exit(1 if failed else 0)


if __name__ == "__main__":
    main()
