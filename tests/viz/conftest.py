"""An invented spine with made-up times: pictures are tested without a solve."""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pytest
import pyvista as pv
import trimesh
from scipy.sparse import coo_matrix
from scipy.sparse.csgraph import connected_components
from skimage.measure import marching_cubes

from bemescape.results.result import EscapeResult, WindowResult
from bemescape.results.summary import Checks, MadeWith, RuleOfThumb, SlowRegion, Summary, WindowSummary


@dataclass(frozen=True)
class PaintedRegion:
    area_um2: float
    mean_time_s: float
    centre_um: np.ndarray
    distance_to_window_um: float
    nearest_window: str
    path_um: np.ndarray


class PaintedRegions(list):
    """Stands for the real slow regions: the same attributes."""

    panel_region: np.ndarray
    level_s: float
    wall_fraction: float


class PaintedResult(EscapeResult):
    """A result whose field is a formula: the time depends on the height above the mouth of the neck."""

    @staticmethod
    def formula(points):
        height = np.clip(np.asarray(points)[:, 2] + 0.95, 0.0, None)
        return 0.018 * np.tanh(1.4 * height) + 0.0008 * np.asarray(points)[:, 0]

    def time_at(self, points, *, outside="raise"):
        points = np.atleast_2d(np.asarray(points, dtype=np.float64))
        body = pv.PolyData.from_regular_faces(self.vertices, self.faces)
        enclosed = pv.PolyData(points).select_interior_points(body, check_surface=False)
        return np.where(enclosed["selected_points"] > 0, self.formula(points), np.nan)

    def slow_regions(self, wall_fraction=0.1):
        wall = self.panel_window < 0
        order = np.argsort(-np.where(wall, self.panel_time_s, -1.0))
        limit = np.searchsorted(
            np.cumsum(self.panel_areas_um2[order]), wall_fraction * self.panel_areas_um2[wall].sum()
        )
        slow = np.zeros(len(self.faces), dtype=bool)
        slow[order[:limit]] = True
        pairs = trimesh.graph.face_adjacency(self.faces)
        pairs = pairs[slow[pairs].all(axis=1)]
        size = len(self.faces)
        graph = coo_matrix((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(size, size))
        _, part = connected_components(graph, directed=False)
        regions = PaintedRegions()
        regions.panel_region = np.full(size, -1)
        regions.level_s = float(self.panel_time_s[slow].min(initial=np.inf))
        regions.wall_fraction = wall_fraction
        if not slow.any():
            return regions
        mouth = self.panel_centroids[self.panel_window == 0].mean(axis=0)
        for label in np.unique(part[slow]):
            panels = np.flatnonzero(slow & (part == label))
            regions.panel_region[panels] = len(regions)
            areas = self.panel_areas_um2[panels]
            centre = self.panel_centroids[panels[np.argmax(areas)]]
            path = np.linspace(centre, mouth, 12)
            regions.append(
                PaintedRegion(
                    float(areas.sum()),
                    float(np.average(self.panel_time_s[panels], weights=areas)),
                    centre,
                    float(np.linalg.norm(centre - mouth)),
                    self.windows[0].name,
                    path,
                )
            )
        return regions

    @cached_property
    def summary(self):
        return Summary(
            name=self.name,
            mean_time_s=self.mean_time_s,
            relative_error=self.relative_error,
            target_met=self.target_met,
            diffusion_um2_s=self.diffusion_um2_s,
            volume_um3=0.31,
            area_um2=float(self.panel_areas_um2.sum()),
            windows=[
                WindowSummary(name=w.name, area_um2=w.area_um2, share=w.share, permeability_um_s=None)
                for w in self.windows
            ],
            start=dict(self.start),
            slowest_time_s=float(self.panel_time_s.max()),
            slow_regions=[
                SlowRegion(
                    area_um2=r.area_um2,
                    mean_time_s=r.mean_time_s,
                    centre_um=tuple(r.centre_um),
                    distance_to_window_um=r.distance_to_window_um,
                    nearest_window=r.nearest_window,
                )
                for r in self.slow_regions()
            ],
            rule_of_thumb=RuleOfThumb(formula="V / (4 D Σa)", mean_time_s=0.0123),
            panels=len(self.faces),
            iterations=self.iterations,
            wall_s=self.wall_s,
            checks=Checks(balance=self.balance),
            notes=list(self.notes),
            made_with=MadeWith(version="0.1.0", mesh_sha256=self.mesh_sha256, settings=dict(self.settings)),
        )


def spine_mesh(step=0.035):
    """A bumpy head on a bent neck that ends flat at z = −0.95, from an implicit body on voxels."""
    low, high = np.array([-0.75, -0.6, -1.15]), np.array([0.75, 0.6, 0.7])
    axes = [np.arange(a, b, step) for a, b in zip(low, high, strict=True)]
    x, y, z = np.meshgrid(*axes, indexing="ij")
    ripple = 0.05 * np.sin(7.0 * x + 1.0) * np.cos(6.0 * y)
    head = np.sqrt((x / 1.4) ** 2 + (1.1 * y) ** 2 + z**2) - 0.40 - ripple
    bend = 0.15 * np.sin(2.5 * z)
    neck = np.maximum(np.hypot(x - bend, y) - 0.11, z)
    body = -0.04 * np.log(np.exp(-head / 0.04) + np.exp(-neck / 0.04))
    body = np.maximum(body, -0.95 - z)
    vertices, faces, _, _ = marching_cubes(body, 0.0, spacing=(step,) * 3)
    mesh = trimesh.Trimesh(vertices + low, faces)
    mesh.fix_normals()
    return np.asarray(mesh.vertices), np.asarray(mesh.faces, dtype=np.int64)


@pytest.fixture(scope="session")
def make_ball():
    return ball


@pytest.fixture(scope="session")
def make_spine():
    return painted


def painted(name="spine 12", step=0.035, names=("neck", "side pore"), **changes):
    vertices, faces = spine_mesh(step)
    centroids = vertices[faces].mean(axis=1)
    window = np.full(len(faces), -1)
    window[centroids[:, 2] < -0.945] = 0
    pore = vertices[np.argmax(vertices[:, 0] + vertices[:, 2])]
    window[np.linalg.norm(centroids - pore, axis=1) < 0.09] = 1
    time = np.where(window >= 0, 0.0, PaintedResult.formula(centroids))
    corners = vertices[faces]
    areas = 0.5 * np.linalg.norm(np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0]), axis=1)
    density = np.zeros(len(faces))
    for number, share in ((0, 0.7), (1, 0.3)):
        inside = window == number
        middle = centroids[inside].mean(axis=0)
        distance = np.linalg.norm(centroids[inside] - middle, axis=1)
        shape = 1.0 / np.sqrt(1.02 - (distance / distance.max()) ** 2)
        density[inside] = share * shape / (shape @ areas[inside])
    values = {
        "name": name,
        "vertices": vertices,
        "faces": faces,
        "parent_face": np.arange(len(faces)),
        "panel_window": window,
        "panel_time_s": time,
        "panel_exit_density_per_um2": density,
        "windows": tuple(
            WindowResult(title, float(areas[window == number].sum()), share)
            for number, (title, share) in enumerate(zip(names, (0.7, 0.3), strict=True))
        ),
        "diffusion_um2_s": 20.0,
        "mean_time_s": 0.01234,
        "relative_error": 0.0031,
        "target": 0.005,
        "target_met": True,
        "balance": 2.1e-5,
        "residuals": (1e-1, 1e-3, 1e-6),
        "levels": (
            {"panels": 2400, "mean_time_s": 0.01221, "iterations": 11, "seconds": 0.6},
            {"panels": 5120, "mean_time_s": 0.01231, "iterations": 12, "seconds": 1.7},
        ),
        "wall_s": 2.4,
        "start": {"release site": 0.0141},
        "notes": ("1 debris part was dropped",),
        "settings": {"target": 0.005, "panel_budget": 100000},
        "mesh_sha256": "ab" * 32,
    }
    return PaintedResult(**(values | changes))


def ball(subdivisions=3, cap=0.5, **changes):
    """A ball of radius 1 µm around the origin; panels within the angle `cap` of +z are a window."""
    sphere = trimesh.creation.icosphere(subdivisions=subdivisions)
    vertices, faces = np.asarray(sphere.vertices), np.asarray(sphere.faces, dtype=np.int64)
    centroids = vertices[faces].mean(axis=1)
    angle = np.arccos(centroids[:, 2] / np.linalg.norm(centroids, axis=1))
    window = np.where(angle < cap, 0, -1)
    areas = sphere.area_faces
    area = float(areas[window == 0].sum())
    result = painted()
    values = {field.name: getattr(result, field.name) for field in dataclasses.fields(result)}
    values |= {
        "name": "ball",
        "vertices": vertices,
        "faces": faces,
        "parent_face": np.arange(len(faces)),
        "panel_window": window,
        "panel_time_s": np.where(window == 0, 0.0, 0.01 + 0.002 * (1.0 - centroids[:, 2])),
        "panel_exit_density_per_um2": np.where(window == 0, 1.0 / area, 0.0),
        "windows": (WindowResult("cap", area, 1.0),),
    }
    return PaintedResult(**(values | changes))


@pytest.fixture(scope="session")
def spine():
    return painted()
