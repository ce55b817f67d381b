"""All measures of a unit together, and the table that asks for them."""

import json

import numpy as np
import pytest
from chains import acquire, body, phantom

from mrics.errors import QualityError
from mrics.quality import METRICS, Measures, measure, measures_from
from mrics.quality.features import Feature
from mrics.quality.metrics import SCORES
from mrics.quality.planes import choose_planes
from mrics.recovery import recover

MM = (3.0, 1.0, 1.0)
SHAPE = (4, 128, 120)
LABELS = np.zeros(SHAPE, int)
LABELS[:, 30:60, 35:85] = 1
LABELS[:, 65:95, 35:85] = 2
EVERYTHING = {
    "edges": True,
    "noise_replicas": 4,
    "resolution_runs": 2,
    "features": [{"shape": "disc", "size_mm": [2, 4], "contrast": [20]}],
    "feature_sites": 4,
    "observer_images": 80,
    "observer_contrast": 8.0,
    "labels": "regions.nii.gz",
    "background_label": 2,
}


@pytest.fixture(scope="module")
def measured():
    image = phantom(SHAPE, dtype=np.complex64)
    held = acquire(image, sigma=0.05)
    seen = []
    result = measure(
        held,
        recover(held, "zero-filled").image,
        image,
        MM,
        method="zero-filled",
        measures=measures_from(EVERYTHING),
        mask=body(SHAPE),
        labels=LABELS,
        progress=lambda *step: seen.append(step),
    )
    return result, seen


def test_every_value_has_a_metric(measured):
    result, _ = measured
    assert len(result.by_plane) == SHAPE[0]
    names = {name for plane in result.by_plane for name in plane}
    plain = {"nrmse", "psnr", "ssim", "hfen", "nrmse_complex"}
    assert names == set(METRICS) - plain
    assert plain == SCORES
    assert measures_from(EVERYTHING).metrics == names
    assert len(result.planes) == 2
    for plane in result.planes:
        assert {"noise_gain", "resolution_u_mm"} <= set(result.by_plane[plane])


def test_values_are_those_of_the_single_measures(measured):
    result, _ = measured
    first = result.by_plane[result.planes[0]]
    # SD sigma sqrt(M / N), 4 replicas of about 2000 voxels.
    assert first["noise_ratio"] == pytest.approx(np.sqrt(1 / 3), rel=0.1)
    assert first["noise_gain"] == pytest.approx(first["noise_ratio"] / np.sqrt(3), rel=0.02)
    assert first["resolution_v_mm"] == pytest.approx(1.2067, rel=0.02)
    assert 0.2 < first["feature_retention"] < 1.0
    assert first["error_invented"] < 1e-6


def test_tables_are_plain_json(measured):
    result, _ = measured
    text = json.dumps(result.tables, allow_nan=False)
    assert {"noise", "resolution", "features", "regions", "observer", "spectral"} <= set(
        json.loads(text)
    )
    rows = result.tables["features"]
    assert [row["size_mm"] is not None for row in rows] == [True, True]
    assert rows[0]["retained"] < rows[1]["retained"]


def test_maps_lie_on_the_whole_stack(measured):
    result, _ = measured
    assert set(result.maps) == {
        "measured",
        "missing",
        "invented",
        "noise_ratio",
        "resolution_u_mm",
        "resolution_v_mm",
        "feature_1",
        "feature_2",
    }
    for name, values in result.maps.items():
        assert values.shape == SHAPE
        assert values.dtype == np.float32
        if name not in ("measured", "missing", "invented"):
            assert np.isnan(values[0]).all() == (0 not in result.planes)


def test_features_stand_where_the_table_says(measured):
    """In the recovered image, the height at every site is about what is said to be kept of it."""
    result, _ = measured
    for number, row in enumerate(result.tables["features"], start=1):
        assert row["nominal_mm"] == (2.0, 4.0)[number - 1]
        assert len(row["placed"]) == row["sites"] == 4
        assert np.mean([one["retained"] for one in row["placed"]]) == pytest.approx(row["retained"])
        change = result.maps[f"feature_{number}"]
        for one in row["placed"]:
            assert one["plane"] in result.planes
            plane = change[one["plane"]]
            seen = plane[one["u"], one["v"]]
            assert seen == pytest.approx(one["retained"] * one["height"], rel=0.35)
            ring = np.abs(plane[one["u"] - 3 : one["u"] + 4, one["v"] - 3 : one["v"] + 4])
            assert seen > 0.8 * ring.max()


def test_progress_names_the_measure(measured):
    _, seen = measured
    names = [step[0] for step in seen]
    assert list(dict.fromkeys(names)) == ["noise gain", "resolution", "features", "observer"]
    assert seen[3] == ("noise gain", 4, 4)


def test_scores_alone_run_no_recovery():
    image = phantom((2, 40, 40))
    held = acquire(image)
    result = measure(held, recover(held, "zero-filled").image, image, MM, method="zero-filled")
    assert result.planes == ()
    assert result.recovery_seconds == 0.0
    assert "ms_ssim" in result.by_plane[0]


def test_labels_give_regions():
    image = phantom((2, 40, 40))
    held = acquire(image)
    labels = np.zeros(image.shape, int)
    labels[:, 10:20, 10:20] = 3
    result = measure(
        held, recover(held, "zero-filled").image, image, MM, method="zero-filled", labels=labels
    )
    assert result.tables["regions"][0]["label"] == 3


def test_region_lines_are_the_worst_region_of_each_plane(measured):
    result, _ = measured
    image = phantom(SHAPE, dtype=np.complex64)
    found = recover(acquire(image, sigma=0.05), "zero-filled").image
    a, b = np.abs(found[1]).astype(float), np.abs(image[1]).astype(float)
    one, two = LABELS[1] == 1, LABELS[1] == 2
    biases = [abs(a[x].mean() / b[x].mean() - 1.0) for x in (one, two)]
    assert result.by_plane[1]["region_bias"] == pytest.approx(max(biases))
    cnr = [
        abs(x[one].mean() - x[two].mean()) / np.sqrt(0.5 * (x[one].var() + x[two].var()))
        for x in (a, b)
    ]
    assert result.by_plane[1]["region_cnr"] == pytest.approx(cnr[0] / cnr[1])
    first = result.tables["regions"][0]
    assert first["cnr"] > 0.0
    assert first["agreement"]["planes"] == SHAPE[0]


def test_features_lie_in_their_regions(measured):
    result, _ = measured
    rows = result.tables["features"]
    assert [row["nominal_mm"] for row in rows] == [2.0, 4.0]
    for place in rows[1]["placed"]:
        reach = range(-8, 9)
        box = {LABELS[place["plane"], place["u"] + a, place["v"] + b] for a in reach for b in reach}
        assert len(box - {0}) == 1
    assert rows[0]["size_interval"]["over"] == "4 sites of this acquisition"


def test_given_edges_are_measured_where_they_lie():
    image = phantom((3, 64, 48))
    held = acquire(image)
    edges = np.array([[1, 6.0, 24.0, 0.0], [1, 32.0, 5.0, 90.0]])
    result = measure(
        held,
        recover(held, "zero-filled").image,
        image,
        MM,
        method="zero-filled",
        measures=Measures(edges=True, more_scores=False, error_split=False),
        edges=edges,
    )
    assert result.by_plane[0]["edge_blur"] is None
    assert [row["plane"] for row in result.tables["edges"]] == [1, 1]
    assert [row["angle_deg"] for row in result.tables["edges"]] == [0.0, 90.0]
    # Undersampled along u, fully sampled along v: the edge across v stays as it is.
    across_u, across_v = (row["width_mm"] / row["reference_mm"] for row in result.tables["edges"])
    assert across_u > 1.2
    assert across_v == pytest.approx(1.0, abs=0.05)
    assert result.by_plane[1]["edge_blur"] == pytest.approx(np.median([across_u, across_v]))


def test_planes_are_spread_over_the_body():
    mask = np.zeros((20, 8, 8), bool)
    mask[5:15] = True
    chosen = choose_planes(mask, mask, Measures(planes=3), MM)
    assert len(chosen) == 3
    assert min(chosen) >= 5
    assert max(chosen) < 15
    block = choose_planes(mask, mask, Measures(features=(Feature("sphere", 6.0),)), MM)
    assert block == tuple(range(block[0], block[0] + 11))
    with pytest.raises(QualityError, match="sphere reaches over 11 planes, the stack has 4"):
        choose_planes(mask[:4], mask[:4], Measures(features=(Feature("sphere", 6.0),)), MM)


def test_combinations_of_features():
    found = measures_from(
        {"features": [{"size_mm": [1, 2], "contrast": [10, -20]}, {"shape": "line"}]}
    )
    assert len(found.features) == 5
    assert found.features[1] == Feature("disc", 1.0, -20.0)
    assert found.recoveries == 6
    assert Measures().recoveries == 0


@pytest.mark.parametrize(
    ("table", "message"),
    [
        ({"nois_replicas": 3}, r"'nois_replicas'(.|\n)*'noise_replicas'"),
        ({"noise_replicas": 1}, "noise_replicas = 1 is not allowed"),
        ({"planes": 0}, "planes = 0 is not allowed"),
        ({"edges": 1}, "edges = 1 is not allowed"),
        ({"edges": [3]}, "a table with i, j, k and angle_deg"),
        ({"edges": [{"i": 1, "j": 2, "k": 0}]}, r"edges\.angle_deg = None"),
        ({"edges": [{"i": 1, "angle": 0}]}, r"'angle'(.|\n)*'angle_deg'"),
        ({"labels": []}, "one path in quotes"),
        ({"labels": 3}, "one path in quotes"),
        ({"background_label": 1}, "given together with labels"),
        ({"labels": "a.nii", "background_label": 0}, "background_label = 0"),
        ({"perturbation_sigma": -1}, "perturbation_sigma = -1 is not allowed"),
        ({"features": [{"diameter": 3}]}, r"'diameter'(.|\n)*features\.diameter"),
        ({"features": [3]}, "features = 3 is not allowed"),
        ({"features": [{"size_mm": ["x"]}]}, r"features\.size_mm = 'x'"),
    ],
)
def test_bad_tables(table, message):
    with pytest.raises(QualityError, match=message):
        measures_from(table)
