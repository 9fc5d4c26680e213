"""A body, an order, and waiting."""

import json
import sys
import time

import numpy as np


def ply_bytes(vertices, faces, labels=None):
    """A binary PLY made by hand, so that the tests bring their own."""
    header = [
        "ply", "format binary_little_endian 1.0", f"element vertex {len(vertices)}",
        "property double x", "property double y", "property double z",
        f"element face {len(faces)}", "property list uchar int vertex_indices",
        *(["property int label"] if labels is not None else []), "end_header",
    ]  # fmt: skip
    kind = np.dtype([("n", "u1"), ("f", "<i4", 3), *([("label", "<i4")] if labels is not None else [])])
    rows = np.zeros(len(faces), kind)
    rows["n"], rows["f"] = 3, faces
    if labels is not None:
        rows["label"] = labels
    return "\n".join(header).encode() + b"\n" + np.asarray(vertices, "<f8").tobytes() + rows.tobytes()


def ball(subdivisions=2):
    """Unit ball as an icosphere: vertices (n, 3), faces (m, 3), and label 1 on the cap above z = 0.9."""
    import trimesh

    mesh = trimesh.creation.icosphere(subdivisions=subdivisions, radius=1.0)
    vertices, faces = np.asarray(mesh.vertices), np.asarray(mesh.faces)
    return vertices, faces, (vertices[faces].mean(axis=1)[:, 2] > 0.85).astype(int)


#: One coarse mesh solves in a second; what the service adds to an answer does not depend on how fine it is.
PANELS = 4000
CAP = {"name": "cap", "labels": {"array": "label", "value": 1}}


def order(surface_id, **more):
    return {
        "surface": surface_id,
        "motion": {"diffusion": "1 um^2/s"},
        "window": [CAP],
        "accuracy": {"target": "30 %", "max_panels": PANELS},
        **more,
    }


def upload(client, data=None, name="ball.ply", unit="um", **more):
    data = ply_bytes(*ball()) if data is None else data
    return client.post("/api/surfaces", files={"file": (name, data)}, data={"unit": unit, **more})


def wait_until_over(client, run_id, seconds=300):
    ends = time.monotonic() + seconds
    while time.monotonic() < ends:
        record = client.get(f"/api/runs/{run_id}").json()
        if record["state"] not in ("queued", "running"):
            return record
        time.sleep(0.1)
    raise AssertionError(f"run {run_id} is still {record['state']}: {record['progress']}")


def tell(figures):
    """Figures for whoever runs this with -s."""
    sys.stdout.write(json.dumps(figures) + "\n")
