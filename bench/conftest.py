"""What every figure of a run needs beside it: processor, instruction set, cores, NumPy."""

import os

import numpy as np

import offbody as ob

QUICK = os.environ.get("OFFBODY_BENCH") == "quick"


def pytest_benchmark_update_machine_info(config, machine_info):
    """Add to the machine's description in the JSON what ``table.py`` prints."""
    machine_info["offbody"] = {
        "processor": machine_info["cpu"].get("brand_raw") or machine_info["machine"],
        "instructions": widest_instructions(),
        "cores": ob.threads(),
        "numpy": np.__version__,
        "quick": QUICK,
    }


def widest_instructions():
    """The widest vector instructions that NumPy found, under the name that people use."""
    found = np.show_config(mode="dicts")["SIMD Extensions"]
    names = [*found.get("baseline", []), *found.get("found", [])]
    for name, marks in (("AVX-512", ("AVX512", "X86_V4")), ("AVX2", ("AVX2", "X86_V3"))):
        if any(feature.startswith(marks) for feature in names):
            return name
    return ", ".join(names) or "none"
