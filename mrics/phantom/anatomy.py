"""Where things are in the invented knee: distances of bones, muscles, ligaments and vessels.

Coordinates in mm: x lateral, y anterior, z superior, origin in the middle of the joint line. No
person was measured; the proportions are those of a textbook adult knee in slight flexion.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from mrics.phantom.shapes import Node, Point, cut, ellipsoid, join, ramp, tube

Array = NDArray[Any]

# Muscles and thick tendons run along z; (point, radius) nodes, then the squash of a flat belly.
MUSCLES: dict[str, tuple[tuple[Node, ...], Point]] = {
    "vastus medialis": (
        (((-22, 20, 84), 23), ((-25, 18, 52), 21), ((-31, 18, 30), 13), ((-30, 24, 14), 4)),
        (1, 1, 1),
    ),
    "vastus lateralis": ((((24, 19, 84), 23), ((28, 17, 52), 18.5), ((34, 19, 31), 6)), (1, 1, 1)),
    "vastus intermedius": (
        (((0, 22, 86), 19), ((0, 24, 62), 15), ((0, 29, 48), 7), ((0, 31, 42), 3)),
        (0.55, 1, 1),
    ),
    "semimembranosus": (
        (((-15, -30, 84), 19), ((-20, -33, 44), 18), ((-25, -36, 14), 10), ((-29, -27, -8), 2.5)),
        (1, 1, 1),
    ),
    "semitendinosus": ((((-8, -47, 84), 11), ((-13, -47, 56), 8), ((-19, -47, 42), 3)), (1, 1, 1)),
    "sartorius": ((((-38, -12, 84), 13), ((-41, -13, 30), 10), ((-41, -10, -12), 4)), (1.4, 1, 1)),
    "gracilis": ((((-36, -35, 84), 8), ((-38, -31, 40), 6), ((-38, -26, 10), 2.4)), (1, 1, 1)),
    "biceps femoris": (
        (((22, -33, 84), 21), ((28, -32, 44), 17), ((35, -28, 12), 8), ((38, -21, -8), 2.5)),
        (1, 1, 1),
    ),
    "gastrocnemius medial": (
        (((-17, -35, 28), 6), ((-18, -43, 6), 13), ((-20, -41, -40), 18), ((-18, -37, -84), 21)),
        (1, 1.1, 1),
    ),
    "gastrocnemius lateral": (
        (((18, -35, 26), 6), ((19, -42, 4), 12), ((21, -40, -40), 16), ((21, -36, -84), 19)),
        (1, 1.1, 1),
    ),
    "popliteus": ((((25, -24, -3), 2.5), ((8, -28, -18), 7), ((-12, -23, -46), 9)), (0.8, 1.2, 1)),
    "soleus": ((((10, -30, -28), 6), ((2, -33, -84), 22)), (0.7, 1, 1)),
    "deep flexors": ((((10, -22, -30), 3), ((8, -22, -84), 15)), (1, 1, 1)),
    "tibialis anterior": ((((30, 4, -16), 4), ((26, 6, -34), 12), ((23, 5, -84), 17)), (1, 1, 1)),
    "peroneus": ((((41, -8, -24), 4), ((38, -8, -50), 10), ((36, -8, -84), 12)), (1, 1, 1)),
}

# Thin dark bands: nodes, squash.
LIGAMENTS: dict[str, tuple[tuple[Node, ...], Point]] = {
    "medial collateral": (
        (((-38.5, -1, 22), 6.5), ((-40.5, 1, -2), 6), ((-37, 4, -34), 5)),
        (4.5, 1, 1),
    ),
    "lateral collateral": ((((38, -4, 20), 2.2), ((40, -18, -10), 2.0)), (1, 1, 1)),
    "iliotibial": ((((43, 2, 84), 8), ((43.5, 8, 20), 7), ((35, 14, -12), 5)), (6, 1, 1)),
    "patellar tendon": ((((0, 48.5, 4), 14), ((1, 38, -16), 12), ((2, 26.5, -34), 10)), (1, 5, 1)),
    "quadriceps tendon": ((((0, 47, 38), 17), ((0, 44, 54), 17), ((0, 41, 84), 15)), (1, 4.5, 1)),
    "semitendinosus tendon": (
        (((-22, -45, 42), 2.4), ((-33, -38, 6), 2.0), ((-39, -18, -24), 1.8)),
        (1, 1, 1),
    ),
}

CRUCIATES: dict[str, tuple[tuple[Node, ...], Point]] = {
    "anterior cruciate": ((((8, -15, 15), 4.8), ((3, -4, 5), 4.2), ((-3, 7, -5), 5.5)), (1, 1, 1)),
    "posterior cruciate": (
        (((-5, 4, 12), 5.2), ((-3, -9, 11), 5.2), ((-1, -21, 1), 4.8), ((0, -28, -11), 5.0)),
        (1, 1, 1),
    ),
}

VESSELS: dict[str, tuple[str, tuple[Node, ...]]] = {
    "popliteal artery": (
        "artery",
        (
            ((-2, -32, 84), 3.4),
            ((2, -32, 40), 3.2),
            ((3, -39, 4), 3.0),
            ((4, -37, -30), 2.8),
            ((2, -32, -84), 2.4),
        ),
    ),
    "popliteal vein": (
        "vein",
        (
            ((3, -38, 84), 4.2),
            ((6, -40, 40), 4.0),
            ((4, -46, 4), 3.9),
            ((8, -43, -30), 3.4),
            ((6, -36, -84), 2.6),
        ),
    ),
    "lateral genicular": (
        "artery",
        (((3, -36, 22), 1.1), ((22, -37, 26), 0.9), ((39, -14, 28), 0.7)),
    ),
    "medial genicular": (
        "artery",
        (((1, -37, 24), 1.0), ((-14, -34, 30), 0.9), ((-37, 2, 32), 0.7)),
    ),
    "sural": ("vein", (((4, -45, 2), 1.4), ((-4, -52, -20), 1.2), ((-2, -54, -84), 1.1))),
    "small saphenous": ("vein", (((5, -46, 2), 1.3), ((6, -58, -14), 1.4), ((5, -59.5, -84), 1.5))),
    "great saphenous": (
        "vein",
        (((-43, -30, 84), 1.9), ((-44, -24, 10), 1.8), ((-43, -8, -84), 1.7)),
    ),
}

NERVES: dict[str, tuple[Node, ...]] = {
    "tibial": (
        ((6, -45, 84), 3.2),
        ((9, -47, 30), 2.8),
        ((8, -50, 0), 2.6),
        ((10, -46, -40), 2.2),
        ((9, -38, -84), 2.2),
    ),
    "peroneal": (
        ((10, -47, 84), 2.4),
        ((24, -46, 34), 2.0),
        ((38, -32, 0), 1.8),
        ((44, -20, -24), 1.6),
    ),
}


def leg(x: Array, y: Array, z: Array, bulge: Array) -> Array:
    """Distance to the skin; ``bulge`` (mm) makes the outline organic."""
    half_x = 48.5 + 3.0 * ramp(z, 20, 80) + 0.5 * ramp(z, -20, -70) + bulge
    half_y = 57.5 + 3.0 * np.exp(-(((z - 16) / 26) ** 2)) - 16.0 * ramp(z, -6, -62) + 0.8 * bulge
    centre = -1.5 - 14.0 * ramp(z, -6, -62)
    px, py = np.abs(x) / half_x, np.abs(y - centre) / half_y
    near = (px**2.35 + py**2.35 + 1e-9) ** (1.0 / 2.35)
    return (
        (near - 1.0)
        * (half_x * half_y)
        / np.sqrt((half_x * py) ** 2 + (half_y * px) ** 2 + 1e-3)
        * near
    )


def femur(x: Array, y: Array, z: Array) -> Array:
    """Distance to the femur: shaft, flare, two condyles, trochlea, notch."""
    shaft = tube(
        x,
        y,
        z,
        (((0, 5, 120), 12.5), ((0, 5, 66), 13.0), ((0, 3, 44), 17.0), ((0, 0, 30), 22.5)),
        (0.74, 1, 1),
    )
    medial = ellipsoid(x, y, z, (-21, -5, 19.5), (15, 29.5, 19.5))
    lateral = ellipsoid(x, y, z, (21.5, -3, 20), (14.5, 30, 19.5))
    trochlea = ellipsoid(x, y, z, (2, 10, 23), (27, 19, 17))
    body = join(join(medial, lateral, 4.0), trochlea, 7.0)
    body = join(body, shaft, 9.0)
    notch = tube(x, y, z, (((0, -30, 16), 10), ((0, -14, 9), 9.5), ((0, 4, -1), 7)))
    body = cut(body, notch, 4.0)
    groove = tube(x, y, z, (((3, 34.5, 44), 6), ((2, 36.5, 24), 8), ((0, 26.5, 2), 8.5)))
    return cut(body, groove, 6.0)


def tibia(x: Array, y: Array, z: Array) -> Array:
    """Distance to the tibia: plateau with its eminence, shaft, tuberosity."""
    rim = np.sqrt((x / 1.0) ** 2 + ((y + 6.0) * 1.5) ** 2 + 1e-3) - 37.5
    rim = np.where(rim > 0, rim, rim / 1.2)
    slab = np.abs(z + 14.5 + 0.05 * (y + 6.0)) - 9.9
    outside = np.sqrt(np.maximum(rim + 4, 0) ** 2 + np.maximum(slab + 4, 0) ** 2)
    plateau = outside + np.minimum(np.maximum(rim + 4, slab + 4), 0) - 4.0
    for side in (-1.0, 1.0):
        dish = ellipsoid(x, y, z, (side * 20.5, -6, 19), (26, 34, 24.3))
        plateau = cut(plateau, dish, 2.0)
    bumps = np.minimum(
        ellipsoid(x, y, z, (-4.5, -8, -5), (4.0, 7, 6.5)),
        ellipsoid(x, y, z, (5.0, -10, -5), (4.0, 6, 5.5)),
    )
    plateau = join(plateau, bumps, 3.0)
    shaft = tube(
        x,
        y,
        z,
        (((0, -5, -30), 20.5), ((-1, -2, -52), 14.5), ((-3, -3, -110), 12.0)),
        (0.8, 1, 1),
    )
    tuberosity = ellipsoid(x, y, z, (2, 15, -35), (8, 9, 14))
    return join(join(plateau, shaft, 12.0), tuberosity, 7.0)


def fibula(x: Array, y: Array, z: Array) -> Array:
    """Distance to the fibula: head and shaft."""
    head = ellipsoid(x, y, z, (37, -20, -17), (8, 9, 10))
    shaft = tube(x, y, z, (((37, -20, -22), 6.0), ((35, -20, -46), 5.2), ((33, -19, -110), 5.6)))
    return join(head, shaft, 5.0)


def patella(x: Array, y: Array, z: Array) -> Array:
    """Distance to the patella: an ellipsoid with two facets behind."""
    body = ellipsoid(x, y, z, (1, 46.5, 20), (22, 10.0, 21))
    for side in (-1.0, 1.0):
        facet = (y - 36.9 - 0.27 * np.abs(x - 1.0)) * np.float32(-0.965)
        body = np.where(side * (x - 1.0) >= 0, np.maximum(body, facet), body)
    return body


def cartilage_thickness(x: Array, y: Array, z: Array, wear: Array) -> tuple[Array, Array, Array]:
    """Thickness (mm) of femoral, tibial and patellar cartilage at each point, 0 outside its zone.

    ``wear`` is a zero-mean field that thins and thickens it.
    """
    beside = np.abs(np.abs(x) - 20.5)
    condyle = ramp(beside, 15.5, 10.5) * ramp(z, 34, 22)
    front = ramp(np.abs(x - 1.5), 26, 20) * ramp(y, 12, 20) * ramp(z, 46, 36)
    femoral = 2.5 * np.maximum(condyle, 1.15 * front) * (1.0 + 0.16 * wear)
    around = np.sqrt(((np.abs(x) - 20.0) / 15.5) ** 2 + ((y + 6.0) / 20.0) ** 2)
    tibial = 2.7 * ramp(around, 1.0, 0.55) * ramp(z, -9.5, -7.0) * (1.0 + 0.16 * wear)
    over = np.sqrt(((x - 1.0) / 20.5) ** 2 + ((z - 21.0) / 17.5) ** 2)
    patellar = 3.6 * ramp(over, 1.0, 0.6) * ramp(y, 45.5, 42.0) * (1.0 + 0.12 * wear)
    return femoral, tibial, patellar
