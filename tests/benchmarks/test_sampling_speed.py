"""Times of the draws."""

import time

import numpy as np
from scipy.stats import qmc

from mrics.numerics import stream
from mrics.sampling import DRAWS, draw_pattern
from mrics.sampling.disc import disc_draw
from mrics.sampling.probability import ONE


def seconds(function, repeats=5):
    """Shortest of several runs, after one for warm-up."""
    function()
    times = []
    for _ in range(repeats):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return min(times)


def test_poisson_disc_sizes(figure):
    for shape in [(128, 128), (256, 192), (256, 256), (512, 512), (1024, 1024)]:

        def draw(shape=shape):
            return draw_pattern(shape, draw="poisson-disc", acceleration=6, elliptical=True)

        taken = seconds(draw, 3)
        figure(
            f"variable-density Poisson disc, {shape[0]} x {shape[1]}, R = 6",
            f"{1e6 * taken / np.prod(shape):.3f} us a grid point ({taken:.3f} s)",
        )


def test_poisson_disc_against_reference(figure):
    for side, acceleration in [(64, 8), (128, 8), (128, 16)]:
        pattern = draw_pattern(
            (side, side), law="uniform", draw="poisson-disc", calibration=0,
            acceleration=acceleration,
        )  # fmt: skip
        count = int(pattern.mask.sum())
        quanta = np.rint(pattern.probability * ONE).astype(np.int64)
        none = np.zeros(quanta.shape, dtype=bool)
        ours = seconds(lambda q=quanta, n=none: disc_draw(q, n, stream(1)), 3)
        # the radius at which the reference jams at as many points, by bisection
        low, high = 0.6 / count**0.5, 0.9 / count**0.5
        while high / low > 1.005:
            radius = (low * high) ** 0.5
            generator = np.random.default_rng(0)
            filled = len(qmc.PoissonDisk(2, radius=radius, rng=generator).fill_space())
            low, high = (radius, high) if filled > count else (low, radius)

        def reference(radius=low):
            return qmc.PoissonDisk(2, radius=radius, rng=np.random.default_rng(0)).fill_space()

        found = len(reference())
        theirs = seconds(reference, 1)
        figure(
            f"scipy.stats.qmc.PoissonDisk / ours, {side} x {side}, constant radius",
            f"{theirs / ours:.0f} ({count} points; theirs {found})",
        )


def test_every_draw(figure):
    for draw in DRAWS:
        taken = seconds(lambda d=draw: draw_pattern((256, 256), draw=d), 5)
        figure(f"one draw, {draw}, 256 x 256, R = 4", f"{1e3 * taken:.1f} ms")


def test_best_of_64(figure):
    for draw in DRAWS:
        for by in ("point-spread", "wavelet-scales"):
            taken = seconds(
                lambda d=draw, b=by: draw_pattern(
                    (256, 256), draw=d, acceleration=6, best_of=64, best_by=b
                ),
                1,
            )
            figure(f"best of 64 draws by {by}, {draw}, 256 x 256", f"{taken:.2f} s")
