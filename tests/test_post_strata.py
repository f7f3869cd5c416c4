"""Post-stratification against printed and computed examples."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from estimate_frames import cases

from landcarbon.errors import UserError
from landcarbon.estimate.post_strata import FORMS, class_rasters, collapse_classes, post_stratified_mean


def test_three_variances_of_computed_case():
    """Independent: A-PST-1, R package survey 4.1.1 and the textbook forms in R."""
    case = cases("computed")["A-PST-1"]
    areas, plots, expected = case["inputs"]["class_areas_ha"], case["inputs"]["plots"], case["expected"]
    labels = list(areas)
    codes = np.array([labels.index(one) for one in plots["class"]])
    found = post_stratified_mean(np.array(plots["y"]), codes, np.array(list(areas.values()), dtype=float))
    assert found.mean[0] == pytest.approx(expected["mean"], rel=1e-9)
    names = ("se_conditional_on_class_counts", "se_linearised", "se_unconditional_approx")
    for form, name in zip(FORMS, names, strict=True):
        assert np.sqrt(found.variances[form][0]) == pytest.approx(expected[name], rel=1e-9)
    assert found.variance[0] == found.variances["conditional"][0]
    assert found.class_mean[:, 0] == pytest.approx(list(expected["mean_by_class"].values()), rel=1e-9)
    assert found.class_variance[:, 0] == pytest.approx(list(expected["variance_by_class"].values()), rel=1e-9)


def test_printed_example():
    """Published: PS-05, Brus (2022) section 10.3."""
    case = cases("published")["PS-05"]
    labels = list(case["inputs"]["N_g"])
    codes = np.array([labels.index(one) for one in case["inputs"]["group"]])
    found = post_stratified_mean(
        np.array(case["inputs"]["z"]), codes, np.array(list(case["inputs"]["N_g"].values()), dtype=float)
    )
    printed = case["printed"]
    assert found.plots.tolist() == printed["n_g"]["value"]
    assert found.mean[0] == pytest.approx(printed["mean"]["value"], abs=5e-6)
    assert np.sqrt(found.variance[0]) == pytest.approx(printed["se_conditional"]["value"], abs=5e-6)
    linearised = np.sqrt(found.variances["linearised"][0])
    assert linearised == pytest.approx(printed["se_linearised_survey_package"]["value"], abs=5e-5)


def test_a_class_without_plots_is_refused_and_can_be_collapsed():
    y, codes, area = np.arange(6.0), np.array([0, 0, 0, 1, 1, 1]), np.array([10.0, 20.0, 5.0])
    with pytest.raises(UserError, match="fewer than two plots"):
        post_stratified_mean(y, codes, area)
    target, findings = collapse_classes(np.array([3, 3, 0]), area, ["a", "b", "c"])
    assert target.tolist() == [0, 1, 0]  # with the class of the fewest plots, the first of two
    assert findings["rule"].tolist() == ["class with few plots"]
    joined = np.bincount(target, weights=area, minlength=3)
    found = post_stratified_mean(y, target[codes], joined)
    assert found.mean[0] == pytest.approx((15 * 1.0 + 20 * 4.0) / 35)  # identity


def test_small_classes_are_put_together_first():
    target, _ = collapse_classes(np.array([1, 30, 1, 9]), np.ones(4), ["a", "b", "c", "d"])
    assert target.tolist() == [0, 1, 0, 3]


def test_a_single_class_that_is_left_is_said():
    target, findings = collapse_classes(np.array([9, 0]), np.ones(2), ["a", "b"])
    assert target.tolist() == [0, 0]
    assert findings["rule"].tolist() == ["class with few plots", "single class left"]


def test_nothing_is_collapsed_without_need():
    target, findings = collapse_classes(np.array([2, 3]), np.ones(2), ["a", "b"])
    assert target.tolist() == [0, 1]
    assert findings.empty


def plots_of(classes):
    plots = [f"p{at}" for at in range(len(classes))]
    return pd.DataFrame({"survey": "1", "plot": plots, "class": classes})


def areas_of(areas, strata):
    rows = {"survey": "1", "by": "stratum", "unit": strata, "class": list(areas), "area_ha": list(areas.values())}
    return pd.DataFrame(rows)


def test_classes_become_columns_of_zero_and_one():
    plots = plots_of(["open", "wet", "closed", "open", "wet", "closed", ""])
    values, means, findings = class_rasters(plots, areas_of({"open": 20.0, "closed": 70.0, "wet": 10.0}, "S"))
    assert findings.empty
    assert sorted(values["raster"].unique()) == ["class=open", "class=wet"]  # "closed" is what they are compared with
    assert means.set_index("raster")["mean"].to_dict() == {"class=open": 0.2, "class=wet": 0.1}
    assert values[values["raster"] == "class=wet"]["value"].tolist() == [0, 1, 0, 0, 1, 0]


def test_classes_within_strata_have_one_reference_each():
    areas = areas_of({"a": 10.0, "b": 20.0, "c": 50.0, "d": 20.0}, ["S", "S", "T", "T"])
    _, means, _ = class_rasters(plots_of(["a", "a", "b", "b", "c", "c", "d", "d"]), areas)
    assert sorted(means["raster"].unique()) == ["class=b", "class=d"]
    assert means[(means["raster"] == "class=b") & (means["unit"] == "S")]["mean"].item() == pytest.approx(2 / 3)
