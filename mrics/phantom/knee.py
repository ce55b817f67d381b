"""The invented knee as a continuous object: signal at any point, for any palette of tissues."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import reduce
from itertools import pairwise
from threading import Lock
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.phantom import anatomy
from mrics.phantom.fields import RandomField
from mrics.phantom.shapes import ellipsoid, fill, join, ramp, tube

Array = NDArray[Any]
Palette = Mapping[str, tuple[int, float]]

_REACH = (90.0, 75.0, 62.0)


@dataclass(frozen=True)
class Feature:
    """A small low-contrast ball at a known place.

    Attributes
    ----------
    name : str
        What it stands for.
    tissue : str
        Tissue it sits in.
    centre_mm : tuple of 3 float
        Place in knee coordinates (lateral, anterior, superior).
    diameter_mm : float
        Diameter of the ball.
    contrast : float
        Relative change of the local signal inside, for example -0.2.
    """

    name: str
    tissue: str
    centre_mm: tuple[float, float, float]
    diameter_mm: float
    contrast: float


@dataclass(frozen=True)
class Knee:
    """One invented subject.

    Attributes
    ----------
    seed : int
        Fixes every texture and the small differences of shape.
    scale : tuple of 3 float
        Size relative to the model along (lateral, anterior, superior).
    mirror : bool
        True for a left knee.
    fat_mm : float
        Mean thickness of the fat under the skin.
    features : tuple of Feature
        Low-contrast balls.
    """

    seed: int
    scale: tuple[float, float, float] = (1.0, 1.0, 1.0)
    mirror: bool = False
    fat_mm: float = 6.0
    features: tuple[Feature, ...] = ()
    _cache: dict[str, RandomField] = field(default_factory=dict, repr=False, compare=False)
    _lock: Lock = field(default_factory=Lock, repr=False, compare=False)

    def field(self, name: str, spacing: Sequence[float]) -> RandomField:
        """Random field ``name`` of this subject, lattice ``spacing`` along (z, y, x) in mm."""
        with self._lock:
            if name not in self._cache:
                self._cache[name] = RandomField(self.seed, name, spacing, _REACH)
            return self._cache[name]

    def signal(self, z: Array, y: Array, x: Array, palette: Palette) -> Array:
        """Signal on a grid of points.

        Parameters
        ----------
        z, y, x : ndarray, 1-D
            Superior, anterior and lateral coordinates in mm (right is lateral unless mirrored).
        palette : mapping of str to (int, float)
            For each tissue the component it belongs to and its signal.

        Returns
        -------
        ndarray of float32, shape (component, z, y, x)
        """
        z, y, x = (np.asarray(axis, dtype=np.float64) for axis in (z, y, x))
        parts = 1 + max(part for part, _ in palette.values())
        values = np.zeros((parts, len(z), len(y), len(x)), dtype=np.float32)
        rows, columns = _leg_box(self, z, y, x)
        if rows.stop > rows.start and columns.stop > columns.start:
            painter = _Painter(self, z, y[rows], x[columns], palette, values[:, :, rows, columns])
            painter.paint()
        return values


def _leg_box(knee: Knee, z: Array, y: Array, x: Array) -> tuple[slice, slice]:
    """Rows and columns that hold the leg, seen on every fourth point, two such points to spare."""
    step = 4
    few = (z[:: max(1, len(z) - 1)], y[::step], x[::step])
    outline = _Painter(knee, *few, {"air": (0, 0.0)}, np.zeros(0)).outline()
    held = outline.min(axis=0) < 3.0
    box = []
    for axis, length in ((1, len(y)), (0, len(x))):
        found = np.flatnonzero(held.any(axis=axis))
        low, high = (found[0] - 2, found[-1] + 3) if len(found) else (0, 0)
        box.append(slice(max(0, low * step), min(length, high * step)))
    return box[0], box[1]


class _Painter:
    """Paints one block, deep structures last; holds the block's coordinates and fields."""

    def __init__(
        self, knee: Knee, z: Array, y: Array, x: Array, palette: Palette, values: Array
    ) -> None:
        self.knee = knee
        self.palette = palette
        self.axes = (z, y, x)
        self.values = values
        sides = -1.0 if knee.mirror else 1.0
        bend = [self.noise(f"warp {a}", (26.0, 26.0, 26.0)) for a in "xyz"]
        f4 = np.float32
        self.x = (sides * f4(1) * x[None, None, :] / knee.scale[0]).astype(f4) + f4(0.9) * bend[0]
        self.y = (y[None, :, None] / knee.scale[1]).astype(f4) + f4(0.9) * bend[1]
        self.z = (z[:, None, None] / knee.scale[2]).astype(f4) + f4(0.8) * bend[2]

    def noise(self, name: str, spacing: Sequence[float]) -> Array:
        return self.knee.field(name, spacing).on(*self.axes)

    def lay(self, share: Array, tissue: str, modulation: Array | float = 1.0) -> None:
        """Cover what is there by ``share`` of ``tissue``."""
        part, signal = self.palette[tissue]
        self.values *= 1.0 - share
        self.values[part] += share * np.float32(signal) * modulation

    def tube(
        self, nodes: Sequence[anatomy.Node], squash: anatomy.Point = (1, 1, 1)
    ) -> Array | None:
        """Distance to a tube, or None where it does not reach into this block."""
        low, high = self.z.min() - 5.0, self.z.max() + 5.0
        near = [
            distance
            for pair in pairwise(nodes)
            if min(p[2] - r for p, r in pair) < high and max(p[2] + r for p, r in pair) > low
            for distance in (tube(self.x, self.y, self.z, pair, squash),)
        ]
        return reduce(np.minimum, near) if near else None

    def outline(self) -> Array:
        """Distance to the skin."""
        bulge = self.noise("outline", (34.0, 30.0, 30.0))
        return anatomy.leg(self.x, self.y, self.z, 1.2 * bulge)

    def paint(self) -> None:
        self.outer_layers()
        self.muscles()
        self.tubes()
        self.joint()
        self.lesions()

    def outer_layers(self) -> None:
        """Skin, fat under it with septa, fascia, and the loose fat that fills the rest."""
        knee, x, y = self.knee, self.x, self.y
        self.leg = self.outline()
        self.lay(fill(self.leg), "skin", 1.0 + 0.06 * self.noise("skin", (2.5, 2.5, 2.5)))
        lobes = self.noise("fat lobes", (4.6, 3.2, 3.2))
        sheet = ramp(self.noise("fat sheet", (12.0, 8.0, 8.0)), -0.4, 1.4)
        septa = ramp(np.abs(lobes), 0.20, 0.0) * sheet
        shade = 1.0 + 0.045 * self.noise("fat shade", (9.0, 7.0, 7.0))
        self.fat_look = (shade * (1.0 - 0.32 * septa)).astype(np.float32)
        self.lay(fill(self.leg + 1.6), "fat", self.fat_look)
        back = 1.0 + 0.55 * ramp(y, 0, -45) + 0.5 * ramp(x, 0, -40) - 0.55 * ramp(y, 25, 45)
        depth = knee.fat_mm * back + 0.9 * self.noise("fat depth", (22.0, 16.0, 16.0))
        self.fascia = self.leg + np.maximum(depth, 2.6)
        self.lay(fill(np.abs(self.fascia) - 0.35), "ligament")

    def muscles(self) -> None:
        """Bellies with bright perimysium around fascicles, parted by planes of fat."""
        first = np.full(self.x.shape, 99.0, dtype=np.float32)
        second, owner = first.copy(), np.zeros(self.x.shape, dtype=np.int8)
        for index, (nodes, squash) in enumerate(anatomy.MUSCLES.values()):
            distance = self.tube(nodes, squash)
            if distance is None:
                continue
            closer = distance < first
            second = np.where(closer, first, np.minimum(second, distance))
            first = np.where(closer, distance, first)
            owner[closer] = index
        if first.min() > 2.0:
            return
        rough = 0.5 * self.noise("belly", (9.0, 5.0, 5.0))
        between = np.maximum(first - second + 1.1, first) + rough
        belly = np.maximum(between, self.fascia + 0.8)
        cells = self.noise("fascicle", (26.0, 2.1, 2.1)) * 0.75
        cells += self.noise("bundle", (34.0, 4.6, 4.6)) * 0.75
        strands = ramp(np.abs(cells), 0.30, 0.05)
        tone = np.linspace(-0.05, 0.05, len(anatomy.MUSCLES), dtype=np.float32)[owner]
        look = (
            1.0 + tone + 0.055 * self.noise("fibre", (8.0, 1.3, 1.3)) - 0.10 * ramp(cells, 0.4, 2)
        )
        share = fill(belly)
        self.lay(fill(np.abs(belly) - 0.3), "ligament")
        self.lay(share, "muscle", look)
        marbling = 0.45 * ramp(self.noise("marbling", (18.0, 8.0, 8.0)), -0.8, 1.6) + 0.22
        self.lay(share * strands * marbling, "fat")

    def tubes(self) -> None:
        """Bands, tendons, nerves and vessels outside the joint."""
        streak = self.noise("streak", (7.0, 1.1, 1.1))
        for nodes, squash in anatomy.LIGAMENTS.values():
            distance = self.tube(nodes, squash)
            if distance is not None:
                inside = np.maximum(distance, self.leg + 2.2)
                self.lay(fill(inside, 0.6), "tendon", 1.0 + 0.25 * streak)
        for nodes in anatomy.NERVES.values():
            distance = self.tube(nodes)
            if distance is not None:
                bundles = 1.0 - 0.35 * ramp(np.abs(streak), 0.5, 0.1)
                self.lay(fill(distance), "nerve", bundles)
        for kind, nodes in anatomy.VESSELS.values():
            distance = self.tube(nodes)
            if distance is not None:
                distance = distance + 0.25 * self.noise("wall", (6.0, 5.0, 5.0))
                distance = np.maximum(distance, self.leg + 2.6)
                self.lay(fill(np.abs(distance) - 0.35), "ligament")
                self.lay(fill(distance), kind, 1.0 - 0.10 * ramp(distance, -1.6, 0.0))

    def joint(self) -> None:
        """Bones, cartilage, menisci, cruciate ligaments and fluid."""
        x, y, z = self.x, self.y, self.z
        femur, tibia = anatomy.femur(x, y, z), anatomy.tibia(x, y, z)
        fibula, patella = anatomy.fibula(x, y, z), anatomy.patella(x, y, z)
        wear = self.noise("wear", (9.0, 9.0, 9.0))
        on_femur, on_tibia, on_patella = anatomy.cartilage_thickness(x, y, z, wear)
        over_femur, over_tibia = femur - on_femur, tibia - on_tibia
        over_patella = patella - on_patella
        self.retinacula(femur, patella)
        self.fluid(over_femur, over_tibia, over_patella, on_femur, on_tibia, on_patella)
        self.cruciates(np.minimum(femur, tibia))
        self.menisci(over_femur, over_tibia)
        for distance, thickness in ((femur, on_femur), (tibia, on_tibia), (patella, on_patella)):
            deep = ramp(distance / np.maximum(thickness, 0.4), 0.75, 0.0)
            layers = (
                1.0 - 0.28 * deep + 0.05 * wear + 0.04 * self.noise("chondral", (2.2, 2.2, 2.2))
            )
            self.lay(fill(distance - thickness) * ramp(thickness, 0.1, 0.7), "cartilage", layers)
        self.bone(femur, 29.0, 1.0, on_femur)
        self.bone(tibia, -19.0, -1.0, on_tibia)
        self.bone(fibula, -21.0, -1.0, None)
        self.bone(patella, None, 1.0, on_patella)

    def bone(self, surface: Array, plate: float | None, up: float, cover: Array | None) -> None:
        """Cortex, then marrow with trabeculae, a growth-plate scar and red-marrow islands."""
        if surface.min() > 1.0:
            return
        away = np.abs(self.z) if plate is not None else np.zeros_like(self.z)
        thick = 0.6 + 2.8 * ramp(away, 36, 68) + 0.18 * self.noise("cortex", (6.0, 6.0, 6.0))
        if cover is not None:
            thick = thick + 0.25 * ramp(cover, 0.3, 1.5)
        self.lay(fill(surface), "cortical")
        inside = surface + thick
        fine = self.noise("trabecula", (1.5, 0.7, 0.7))
        mid = self.noise("trabecula mid", (3.6, 1.4, 1.4))
        wide = self.noise("marrow shade", (9.0, 6.0, 6.0))
        dense = 0.085 + 0.055 * ramp(inside, -9.0, -0.5) - 0.04 * ramp(away, 30, 60)
        look = 1.0 - dense * (1.0 + 1.1 * fine + 0.55 * mid) + 0.045 * wide
        look = np.maximum(look, 0.35)
        if plate is not None:
            wave = 2.2 * self.noise("growth plate", (60.0, 8.0, 8.0))
            scar = np.exp(-(((self.z - plate - wave) / 0.75) ** 2))
            look -= 0.28 * scar
        share = fill(inside)
        self.lay(share, "marrow", look)
        if plate is not None:
            islands = ramp(self.noise("red marrow", (7.0, 5.5, 5.5)), 0.5, 1.8)
            islands = islands * ramp(up * self.z, abs(plate) + 4, abs(plate) + 22)
            self.lay(share * 0.45 * islands, "red marrow", look)

    def fluid(self, femur: Array, tibia: Array, patella: Array, *covers: Array) -> None:
        """A film between cartilage faces, the recesses and the pouch above the patella."""
        film = np.maximum(np.maximum(femur, tibia) - 1.5, self.leg + 9.0)
        film = np.maximum(film, np.minimum(np.abs(self.x) - 36.0, 9.0))
        front = np.maximum(np.maximum(femur, patella) - 1.3, np.abs(self.x) - 25.0)
        pouch = ellipsoid(self.x, self.y, self.z, (0, 34, 47), (19, 2.2, 15))
        pouch = pouch + 0.7 * self.noise("pouch", (6.0, 6.0, 6.0))
        notch = ellipsoid(self.x, self.y, self.z, (0, -12, 3), (8, 17, 9))
        notch = notch + 1.6 * self.noise("synovium", (3.6, 3.6, 3.6)) + 1.5
        share = fill(np.minimum(np.minimum(film, front), np.minimum(pouch, notch)), 0.8)
        self.lay(share, "fluid", 1.0 + 0.03 * self.noise("fluid", (6.0, 6.0, 6.0)))

    def retinacula(self, femur: Array, patella: Array) -> None:
        """The sheet that spans from the patella's edges to the sides of the femur."""
        sheet = np.abs(join(patella - 1.5, femur - 1.5, 26.0)) - 0.45
        reach = (
            ramp(self.z, 46, 38) * ramp(self.z, -6, 2) * ramp(self.y, 2, 10) * ramp(self.y, 45, 40)
        )
        self.lay(fill(sheet) * reach * ramp(np.abs(self.x), 20, 26), "tendon")

    def cruciates(self, bones: Array) -> None:
        """Striated bands in the notch."""
        strand = self.noise("strand", (3.6, 3.0, 0.9))
        for name, (nodes, squash) in anatomy.CRUCIATES.items():
            distance = self.tube(nodes, squash)
            if distance is None:
                continue
            share = fill(distance + 0.4 * strand, 0.9)
            loose = 0.30 if name.startswith("anterior") else 0.08
            self.lay(share, "ligament", 1.0 + 0.12 * strand)
            self.lay(share * loose * ramp(strand, 0.2, 1.2), "fluid")

    def menisci(self, femur: Array, tibia: Array) -> None:
        """Wedges that fill the gap between the faces, open towards the notch."""
        x, y, z = self.x, self.y, self.z
        if z.min() > 12 or z.max() < -14:
            return
        span = np.where(x < 0, np.float32(15.8), np.float32(15.2))
        reach = np.where(x < 0, np.float32(21.5), np.float32(19.0))
        around = np.sqrt(((np.abs(x) - 20.5) / span) ** 2 + ((y + 5.5) / reach) ** 2)
        body = np.maximum((around - 1.08) * 16.0, (0.52 - around) * 16.0)
        opening = np.minimum(12.0 - np.abs(x), 11.0 - np.abs(y + 5.5))
        body = np.maximum(body, opening)
        body = np.maximum(body, np.maximum(0.25 - femur, 0.25 - tibia))
        body = np.maximum(body, np.maximum(femur, tibia) - 7.5)
        grain = self.noise("meniscus", (2.4, 2.4, 2.4))
        self.lay(fill(body, 0.6), "meniscus", 1.0 + 0.10 * grain)

    def lesions(self) -> None:
        """Known low-contrast balls, exact in unwarped coordinates."""
        z, y, x = self.axes
        for item in self.knee.features:
            radius = item.diameter_mm / 2.0
            if z.min() > item.centre_mm[2] + radius + 1 or z.max() < item.centre_mm[2] - radius - 1:
                continue
            side = -1.0 if self.knee.mirror else 1.0
            away = np.sqrt(
                (z[:, None, None] - item.centre_mm[2]) ** 2
                + (y[None, :, None] - item.centre_mm[1]) ** 2
                + (side * x[None, None, :] - item.centre_mm[0]) ** 2
            )
            self.values *= (1.0 + item.contrast * fill(away - radius)).astype(np.float32)
