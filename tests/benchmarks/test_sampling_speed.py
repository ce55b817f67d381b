"""Times of the draws, printed: run with ``pytest -s tests/benchmarks/test_sampling_speed.py``."""

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


def test_poisson_disc_sizes():
    print("\nvariable-density Poisson-disc, R = 6, power law, elliptical; draw_pattern in all")
    print(f"{'grid':>12} {'s':>8} {'us per grid point':>18}")
    for shape in [(128, 128), (256, 192), (256, 256), (512, 512), (1024, 1024)]:

        def draw(shape=shape):
            return draw_pattern(shape, draw="poisson-disc", acceleration=6, elliptical=True)

        taken = seconds(draw, 3)
        print(f"{shape[0]:>6} x{shape[1]:>5} {taken:8.3f} {1e6 * taken / np.prod(shape):18.3f}")


def test_poisson_disc_against_reference():
    print("\nconstant radius, equal number of points: mrics and scipy.stats.qmc.PoissonDisk")
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
        print(
            f"{side:>4} x {side:<4} {count:>5} points (reference {found}): "
            f"{ours:.4f} s, reference {theirs:.3f} s, ratio {theirs / ours:.0f}"
        )


def test_every_draw():
    print("\none draw of 256 x 256, R = 4")
    for draw in DRAWS:
        taken = seconds(lambda d=draw: draw_pattern((256, 256), draw=d), 5)
        print(f"{draw:>16} {1e3 * taken:8.1f} ms")


def test_best_of_64():
    print("\nbest of 64 draws, 256 x 256, R = 6")
    for draw in DRAWS:
        for by in ("point-spread", "wavelet-scales"):
            taken = seconds(
                lambda d=draw, b=by: draw_pattern(
                    (256, 256), draw=d, acceleration=6, best_of=64, best_by=b
                ),
                1,
            )
            print(f"{draw:>16} by {by:<15} {taken:6.2f} s")
