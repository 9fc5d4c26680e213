"""What is wrong with a mesh, how much, and where."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import asdict, dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from bemescape.surface.crossings import find_crossings
from bemescape.surface.measure import (
    altitudes,
    box_diagonal,
    edge_lengths,
    equal_rows,
    face_volumes,
    radius_ratios,
    sums,
    triangle_keys,
)
from bemescape.surface.nesting import nesting_depths
from bemescape.surface.surface import triangle_areas_normals
from bemescape.surface.topology import Edges, corner_fans, linked_groups, oriented_signs
from bemescape.units import format_length

__all__ = ["ZERO_ALTITUDE", "BorderLoop", "Finding", "HealthReport", "Part", "Spread", "check_surface"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Severity = Literal["note", "warning", "error"]

#: A face whose altitude is below this part of the bounding box's diagonal has no area.
ZERO_ALTITUDE = 1e-9
_LISTED = 24
_PARTS_LISTED = 200
_THIN = 0.02
_MIN_BOX_UM, _MAX_BOX_UM = 0.01, 1000.0


@dataclass(frozen=True)
class Finding:
    """One kind of damage or oddity.

    Attributes
    ----------
    kind : str
        "open edges", "crowded edges" and so on.
    severity : "note", "warning" or "error"
        With an error the surface cannot be solved as it is.
    count : int
        How many there are.
    message : str
        One sentence.
    faces : tuple of int
        Numbers of the first faces concerned, from 0, in the order of the mesh.
    places_um : tuple of (x, y, z)
        The first places, in µm.
    """

    kind: str
    severity: Severity
    count: int
    message: str
    faces: tuple[int, ...] = ()
    places_um: tuple[tuple[float, float, float], ...] = ()


@dataclass(frozen=True)
class Part:
    """Faces that hang together by edges.

    `depth` counts the closed parts around it and `handles` the holes through it (0 a ball, 1 a ring); both
    are None where the part is not closed. `volume_um3` is negative for a part whose faces look inwards.
    """

    faces: int
    area_um2: float
    volume_um3: float
    closed: bool
    depth: int | None
    handles: int | None
    centre_um: tuple[float, float, float]


@dataclass(frozen=True)
class BorderLoop:
    """Open edges that hang together: the rim of a hole, or of several that touch."""

    edges: int
    length_um: float
    centre_um: tuple[float, float, float]


@dataclass(frozen=True)
class Spread:
    """Smallest value, 5 % quantile, median and largest value."""

    smallest: float
    low: float
    median: float
    largest: float


@dataclass(frozen=True)
class HealthReport:
    """State of a mesh; lengths in µm.

    `parts` and `loops` list the largest ones only; `part_count` and `loop_count` are complete. `handles`
    is the total over closed parts. `crossing_faces` is None where the search was given up because the mesh
    is too large.
    """

    vertices: int
    faces: int
    closed: bool
    open_edges: int
    loop_count: int
    loops: tuple[BorderLoop, ...]
    crowded_edges: int
    crowded_vertices: int
    doubled_faces: int
    zero_area_faces: int
    unused_vertices: int
    equal_vertices: int
    part_count: int
    parts: tuple[Part, ...]
    disagreeing_edges: int
    one_sided_parts: int
    inverted_parts: int
    handles: int
    volume_um3: float
    area_um2: float
    lowest_um: tuple[float, float, float]
    highest_um: tuple[float, float, float]
    edge_length_um: Spread
    triangle_quality: Spread
    crossing_faces: int | None
    findings: tuple[Finding, ...]

    @property
    def ok(self) -> bool:
        """Whether the surface can be solved as it is."""
        return not any(finding.severity == "error" for finding in self.findings)

    def to_dict(self) -> dict[str, Any]:
        """Plain numbers, text and lists, ready for JSON."""
        return {"ok": self.ok, **asdict(self)}

    def lines(self) -> list[str]:
        """The report as sentences, the damage last."""
        size = " × ".join(format_length(high - low) for low, high in zip(self.lowest_um, self.highest_um, strict=True))
        edge, quality = self.edge_length_um, self.triangle_quality
        parts = f"{self.part_count} part" + ("s" if self.part_count != 1 else "")
        state = "closed" if self.closed else "not closed"
        return [
            f"{self.faces} faces, {self.vertices} vertices: {state}, {parts}, {self.handles} handles",
            f"volume {self.volume_um3:.5g} µm³, area {self.area_um2:.5g} µm², box {size}",
            f"edges {format_length(edge.smallest)} to {format_length(edge.largest)}, median "
            f"{format_length(edge.median)}; "
            f"triangle quality (1 is equilateral) lowest {quality.smallest:.2g}, 5 % below "
            f"{quality.low:.2g}, "
            f"median {quality.median:.2g}",
            *(f"{finding.severity}: {finding.message}" for finding in self.findings),
        ]


def check_surface(vertices: Floats, faces: Ints, *, crossings: bool = True) -> HealthReport:
    """Examine a mesh without changing it.

    Parameters
    ----------
    vertices : (n, 3) float
        In µm.
    faces : (m, 3) int, m >= 1
        Corner numbers within 0 to n - 1.
    crossings : bool, default True
        Whether to search for faces that pass through one another, the slowest of the checks.

    Returns
    -------
    HealthReport
        `.ok` tells whether the mesh is one or several closed, well-oriented shells.
    """
    return _Examination(np.asarray(vertices, np.float64), np.asarray(faces, np.int64)).report(crossings=crossings)


def _triple(values: Floats) -> tuple[float, float, float]:
    return float(values[0]), float(values[1]), float(values[2])


def _spread(values: Floats) -> Spread:
    if not len(values):
        return Spread(0.0, 0.0, 0.0, 0.0)
    low, five, median, high = np.percentile(values, [0.0, 5.0, 50.0, 100.0])
    return Spread(float(low), float(five), float(median), float(high))


class _Examination:
    """Shared arrays of one check, and the findings as they come up."""

    def __init__(self, vertices: Floats, faces: Ints) -> None:
        self.vertices, self.faces = vertices, faces
        self.edges = Edges.of(faces)
        self.areas, _ = triangle_areas_normals(vertices, faces)
        self.lengths = edge_lengths(vertices, faces)
        self.findings: list[Finding] = []

    def note(
        self,
        kind: str,
        severity: Severity,
        count: int,
        message: str,
        faces: Iterable[int] = (),
        places: Floats | None = None,
    ) -> None:
        """Add a finding if there is anything to find; places are the middles of its faces if not given."""
        if not count:
            return
        listed = tuple(int(face) for face in faces)[:_LISTED]
        if places is None:
            places = self.vertices[self.faces[list(listed)]].mean(axis=1) if listed else np.zeros((0, 3))
        spots = tuple(_triple(place) for place in places[:_LISTED])
        self.findings.append(Finding(kind, severity, int(count), message, listed, spots))

    def report(self, *, crossings: bool) -> HealthReport:
        """Run every check."""
        vertices, faces, edges = self.vertices, self.faces, self.edges
        used = np.zeros(len(vertices), dtype=bool)
        used[faces.reshape(-1)] = True
        box = vertices[used]
        unused = int((~used).sum())
        equal = len(vertices) - int(equal_rows(vertices).max(initial=-1)) - 1
        loops = self._open_edges()
        crowded_vertices, fans = self._crowded()
        doubled, zero = self._useless_faces()
        part_count, parts, one_sided, inverted, handles = self._parts(fans)
        crossing = self._crossings() if crossings else None
        self.note("unused vertices", "note", unused, f"{unused} vertices belong to no face")
        if edges.open_half_edges.size:
            self.note(
                "equal vertices",
                "note",
                equal,
                f"{equal} vertices repeat the position of another; welding may close gaps",
            )
        quality = radius_ratios(self.areas, self.lengths)
        thin = np.flatnonzero(quality < _THIN)
        thin = thin[np.argsort(quality[thin])]
        self.note(
            "thin triangles",
            "note",
            len(thin),
            f"{len(thin)} triangles are needles (quality below {_THIN})",
            thin,
        )
        self._size(box)
        return HealthReport(
            vertices=len(vertices),
            faces=len(faces),
            closed=bool(len(faces)) and bool((edges.counts == 2).all()),
            open_edges=len(edges.open_half_edges),
            loop_count=len(loops),
            loops=tuple(loops[:_LISTED]),
            crowded_edges=len(edges.crowded),
            crowded_vertices=crowded_vertices,
            doubled_faces=doubled,
            zero_area_faces=zero,
            unused_vertices=unused,
            equal_vertices=equal,
            part_count=part_count,
            parts=tuple(parts),
            disagreeing_edges=int(edges.same_way.sum()),
            one_sided_parts=one_sided,
            inverted_parts=inverted,
            handles=handles,
            volume_um3=float(face_volumes(vertices, faces, box.mean(axis=0)).sum()) if len(box) else 0.0,
            area_um2=float(self.areas.sum()),
            lowest_um=_triple(box.min(axis=0)) if len(box) else (0.0, 0.0, 0.0),
            highest_um=_triple(box.max(axis=0)) if len(box) else (0.0, 0.0, 0.0),
            edge_length_um=_spread(self.lengths.reshape(-1)),
            triangle_quality=_spread(quality),
            crossing_faces=crossing,
            findings=tuple(self.findings),
        )

    def _open_edges(self) -> list[BorderLoop]:
        edges = self.edges
        rim = edges.open_half_edges
        tails, heads = edges.tail[rim], edges.head[rim]
        a, b = self.vertices[tails], self.vertices[heads]
        ends, place = np.unique(np.concatenate([tails, heads]), return_inverse=True)
        count, line = linked_groups(len(ends), place[: len(rim)], place[len(rim) :])
        line = line[place[: len(rim)]]
        size = np.bincount(line, minlength=count)
        length = sums(line, np.linalg.norm(b - a, axis=1), count)
        middle = sums(line, 0.5 * (a + b), count)
        loops = [
            BorderLoop(int(size[k]), float(length[k]), _triple(middle[k] / size[k]))
            for k in np.argsort(-length, kind="stable")
        ]
        if loops:
            longest = loops[0]
            where = ", ".join(f"{value:.4g}" for value in longest.centre_um)
            self.note(
                "open edges",
                "error",
                len(rim),
                f"{len(rim)} open edges around {len(loops)} holes; the longest rim has {longest.edges} "
                f"edges, "
                f"{format_length(longest.length_um)}, around ({where}) µm",
                rim // 3,
                0.5 * (a + b),
            )
        return loops

    def _crowded(self) -> tuple[int, Ints]:
        """Number of vertices with several fans away from crowded edges, and the fan of each corner."""
        edges = self.edges
        crowded = edges.crowded
        middles = self.vertices[edges.ends[crowded[:_LISTED]]].mean(axis=1)
        listed = [int(edges.half_edges(int(edge))[0]) // 3 for edge in crowded[:_LISTED]]
        self.note(
            "crowded edges",
            "error",
            len(crowded),
            f"{len(crowded)} edges are shared by more than two faces (non-manifold), as where voxels touch "
            f"along an edge",
            listed,
            middles,
        )
        count, fans = corner_fans(edges, edges.pairs)
        vertex_of_fan = np.zeros(count, dtype=np.int64)
        vertex_of_fan[fans] = self.faces.reshape(-1)
        several = np.bincount(vertex_of_fan, minlength=len(self.vertices)) > 1
        several[edges.ends[crowded].reshape(-1)] = False
        # Several fans at a hole's rim are the hole's matter.
        several[edges.ends[edges.counts == 1].reshape(-1)] = False
        points = np.flatnonzero(several)
        hits = np.flatnonzero(several[self.faces].any(axis=1))[:_LISTED] if len(points) else ()
        self.note(
            "crowded vertices",
            "error",
            len(points),
            f"{len(points)} vertices join pieces of surface that meet nowhere else (non-manifold)",
            hits,
            self.vertices[points[:_LISTED]],
        )
        return len(points), fans

    def _useless_faces(self) -> tuple[int, int]:
        keys = triangle_keys(self.faces)
        doubled = np.flatnonzero(np.bincount(keys)[keys] > 1)
        extra = len(keys) - (int(keys.max(initial=-1)) + 1)
        self.note("doubled faces", "error", extra, f"{extra} faces repeat the corners of another face", doubled)
        limit = ZERO_ALTITUDE * box_diagonal(self.vertices)
        zero = np.flatnonzero(altitudes(self.areas, self.lengths) <= limit)
        self.note("zero-area faces", "error", len(zero), f"{len(zero)} faces have no area", zero)
        return extra, len(zero)

    def _parts(self, fans: Ints) -> tuple[int, list[Part], int, int, int]:
        vertices, faces, edges = self.vertices, self.faces, self.edges
        count, part = edges.parts()
        whole = np.ones(count, dtype=bool)
        whole[part[edges.order[edges.starts[edges.counts != 2]] // 3]] = False
        pairs = edges.pairs
        signs, group, one_sided_groups = oriented_signs(len(faces), pairs[:, 0] // 3, pairs[:, 1] // 3, edges.same_way)
        del signs
        one_sided = np.zeros(count, dtype=bool)
        one_sided[part[np.isin(group, one_sided_groups)]] = True
        disagree = np.zeros(count, dtype=bool)
        disagree[part[pairs[edges.same_way, 0] // 3]] = True

        closed_number = np.where(whole, np.cumsum(whole) - 1, -1)
        depth = np.full(count, -1, dtype=np.int64)
        depth[whole] = nesting_depths(vertices, faces, closed_number[part], int(whole.sum()))
        centre = vertices[faces].mean(axis=1)
        size = np.bincount(part, minlength=count)
        area = sums(part, self.areas, count)
        volume = sums(part, face_volumes(vertices, faces, vertices.mean(axis=0)), count)
        middle = sums(part, centre, count) / np.maximum(size, 1)[:, None]
        _, first_corner = np.unique(fans, return_index=True)
        fan_count = np.bincount(part[first_corner // 3], minlength=count)
        edge_count = np.bincount(part[edges.order[edges.starts] // 3], minlength=count)
        characteristic = fan_count - edge_count + size

        mixed = int(edges.same_way.sum())
        self.note(
            "disagreeing faces",
            "error",
            mixed,
            f"{mixed} edges join faces that look to opposite sides",
            pairs[edges.same_way, 0] // 3,
        )
        self.note(
            "one-sided parts",
            "error",
            int(one_sided.sum()),
            f"{int(one_sided.sum())} parts have only one side (as a Möbius strip), so no inside",
            np.flatnonzero(one_sided[part])[:_LISTED],
        )
        wanted = np.where(depth % 2 == 0, 1.0, -1.0)
        inverted = whole & ~disagree & (depth >= 0) & (volume * wanted < 0.0)
        self.note(
            "inverted parts",
            "error",
            int(inverted.sum()),
            f"{int(inverted.sum())} closed parts have their faces looking into the diffusing volume",
            np.flatnonzero(inverted[part])[:_LISTED],
        )
        self._nesting(depth, whole, part)
        order = np.argsort(-area, kind="stable")[:_PARTS_LISTED]
        handles = np.where(whole & ~one_sided, (2 - characteristic) // 2, 0)
        parts = [
            Part(
                faces=int(size[k]),
                area_um2=float(area[k]),
                volume_um3=float(volume[k]),
                closed=bool(whole[k]),
                depth=int(depth[k]) if depth[k] >= 0 else None,
                handles=int(handles[k]) if whole[k] and not one_sided[k] else None,
                centre_um=_triple(middle[k]),
            )
            for k in order
        ]
        self._part_of_face = part
        return count, parts, int(one_sided.sum()), int(inverted.sum()), int(handles.sum())

    def _nesting(self, depth: Ints, whole: NDArray[np.bool_], part: Ints) -> None:
        inner = int((depth % 2 == 1)[whole & (depth >= 0)].sum())
        outer = int((depth % 2 == 0)[whole & (depth >= 0)].sum())
        unknown = int((whole & (depth < 0)).sum())
        self.note(
            "obstacles", "note", inner, f"{inner} closed parts lie inside another: obstacles that molecules "
                f"go around",
            np.flatnonzero(((depth % 2 == 1) & (depth >= 0))[part])[:_LISTED],
        )  # fmt: skip
        if outer > 1:
            self.note(
                "separate bodies",
                "note",
                outer,
                f"{outer} separate bodies: each needs a window of its own",
                (),
            )
        self.note(
            "unplaced parts", "error", unknown,
            f"{unknown} closed parts are too many to say which lies in which; drop the debris first", (),
        )  # fmt: skip

    def _crossings(self) -> int | None:
        found = find_crossings(self.vertices, self.faces)
        if not found.complete:
            self.note(
                "crossings not searched",
                "note",
                1,
                f"{len(self.faces)} faces are too many to search for faces that cross one another",
            )
            return None
        part = self._part_of_face
        between = part[found.pairs[:, 0]] != part[found.pairs[:, 1]]
        within = np.unique(found.pairs[~between])
        across = np.unique(found.pairs[between])
        self.note(
            "overlapping parts",
            "error",
            len(across),
            f"{len(across)} faces of different parts cross, so that these parts overlap",
            across,
        )
        self.note(
            "crossing faces",
            "warning",
            len(within),
            f"{len(within)} faces cross other faces of the same part; the volume there is counted twice or lost",
            within,
        )
        return len(np.unique(found.pairs))

    def _size(self, box: Floats) -> None:
        longest = float(np.ptp(box, axis=0).max()) if len(box) else 0.0
        if longest < _MIN_BOX_UM or longest > _MAX_BOX_UM:
            side = "under 10 nm" if longest < _MIN_BOX_UM else "over 1 mm"
            self.note(
                "unit",
                "warning",
                1,
                f"the bounding box is {format_length(longest)} long, {side}: is the unit of the file right?",
            )
