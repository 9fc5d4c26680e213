"""Stand-ins for the solver where a claim is about the engine or the store, and the studies such tests run.

Worker processes import this module too, so that it stands beside the tests' other helpers.
"""

import hashlib
import math
import os
import signal
import time

import trimesh

from bemescape.errors import WindowError

SHAPES = 12


def write_shapes(folder, count=SHAPES, *, unit="um"):
    """Small boxes of different sizes, their list with groups, and a study file; returns the study file."""
    rows = ["file,group,age_d"]
    for number in range(count):
        box = trimesh.creation.box((1.0, 1.0, 1.0 + 0.1 * number))
        box.export(folder / f"box_{number:02d}.ply")
        rows.append(f"box_{number:02d}.ply,{'AB'[number % 2]},{3 * number}")
    (folder / "shapes.csv").write_text("\n".join(rows) + "\n", encoding="utf-8")
    study = folder / "boxes.study.toml"
    study.write_text(
        f'[[shapes]]\nlist = "shapes.csv"\nunit = "{unit}"\n[motion]\ndiffusion = "1 um^2/s"\n'
        '[[window]]\nname = "pore"\ndisc = { centre = [0, 0, 0.5], radius = "200 nm" }\n[accuracy]\ntarget = "5 %"\n',
        encoding="utf-8",
    )
    return study


def values_of(order):
    """Numbers that depend on the mesh alone, so that every run must find the same."""
    digest = hashlib.sha256(b"".join(order.files[name] for name in sorted(order.files))).digest()
    part = int.from_bytes(digest[:6], "big") / 2.0**48
    time_s = math.exp(part)
    return {
        "mean_time_s": time_s,
        "relative_error": 0.01 * part,
        "mean_time_error_s": 0.01 * part * time_s,
        "target_met": True,
        "cv": 1.0 + part,
        "volume_um3": 1.0 + part,
        "area_um2": 6.0 + part,
        "shares": {"pore": 1.0},
        "notes": "",
        "solve_wall_s": time.time() % 1.0,
    }


def quick(order, folder):
    """Writes two files and answers."""
    (folder / "result" / "values.bin").write_bytes(hashlib.sha256(order.key.encode()).digest() * 2000)
    (folder / "result" / "note.txt").write_text(order.name, encoding="utf-8")
    return values_of(order)


def slow(order, folder):
    """Takes long enough to be interrupted."""
    time.sleep(0.15)
    return quick(order, folder)


def fails_on_one(order, folder):
    """One shape has no window, one raises what nobody foresaw."""
    if order.name == "box_03":
        raise WindowError("window 'pore' lies 1.50 µm off the wall (limit 0.10 µm); move its centre")
    if order.name == "box_04":
        raise ZeroDivisionError("nobody foresaw this")
    return quick(order, folder)


def kills_its_worker(order, folder):
    """The way a worker that runs out of memory ends."""
    if order.name == "box_02":
        os.kill(os.getpid(), signal.SIGKILL)
    return quick(order, folder)
