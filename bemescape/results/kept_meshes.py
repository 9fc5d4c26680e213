"""What the solves on one surface leave for the next: meshes, and near fields whose rows can be taken over."""

from __future__ import annotations

from dataclasses import dataclass, field

from bemescape.bem.near_reuse import EarlierNearField
from bemescape.results.accuracy import Rung
from bemescape.results.prepared import PreparedMesh
from bemescape.windows.grade import GradedMesh, SizeLimit
from bemescape.windows.placement import Placement
from bemescape.windows.window import Shape

__all__ = ["KeptMesh", "KeptMeshes"]


@dataclass(frozen=True, eq=False)
class KeptMesh:
    """One resolution that was solved: its mesh, the sizes it was asked for, and its solver."""

    rung: Rung
    mesh: GradedMesh
    limits: tuple[SizeLimit, ...]
    prepared: PreparedMesh


@dataclass
class KeptMeshes:
    """The meshes of the latest solve, one to a resolution."""

    _shapes: tuple[tuple[Shape, bool], ...] = ()
    _latest: dict[Rung, KeptMesh] = field(default_factory=dict)
    _of_these_shapes: set[Rung] = field(default_factory=set)

    def same_place(self, placement: Placement, rung: Rung) -> KeptMesh | None:
        """The mesh of this resolution, where its windows are the same parts of the wall."""
        if self._shapes == _shapes(placement) and rung in self._of_these_shapes:
            return self._latest[rung]
        return None

    def latest_near_field(self, rung: Rung) -> EarlierNearField | None:
        """The near field of this resolution of the latest mesh."""
        if rung not in self._latest:
            return None
        prepared = self._latest[rung].prepared
        if prepared.near is None:
            return None
        return EarlierNearField(prepared.panels, prepared.window_of >= 0, prepared.near)

    def keep(self, placement: Placement, mesh: KeptMesh) -> None:
        """Keep a mesh instead of the one of the same resolution."""
        shapes = _shapes(placement)
        if shapes != self._shapes:
            self._shapes, self._of_these_shapes = shapes, set()
        self._latest[mesh.rung] = mesh
        self._of_these_shapes.add(mesh.rung)


def _shapes(placement: Placement) -> tuple[tuple[Shape, bool], ...]:
    """What each window is, and whether it is a compact pore."""
    compact = set() if placement.pores is None else set(placement.pores.number.tolist())
    return tuple((window.shape, number in compact) for number, window in enumerate(placement.windows))
