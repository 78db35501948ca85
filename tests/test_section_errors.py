"""Every error of a section says what is wrong, where, and how to mend it."""

from __future__ import annotations

import numpy as np
import pytest

from terrain2q.errors import InputError, NoAnswerError, ProfileError
from terrain2q.hydraulics.section import DepthRoughness, Section, Subarea

X, Z = [0.0, 0.0, 10.0, 10.0], [5.0, 0.0, 0.0, 5.0]
NAN, INF = float("nan"), float("inf")


def rectangle(**options):
    return Section(X, Z, n=0.03, section_id="R-7", **options)


def halves(left="left", right="right", **options):
    return Section(
        X, Z, [Subarea(0, 5, 0.03, left), Subarea(5, 10, 0.05, right)], section_id="R-7", **options
    )


WRONG = {
    # what is asked: (call, code, words of the message)
    "one point": (lambda: Section([0], [1], n=0.03), "profile-too-short", ["1 point", "profile"]),
    "no point": (lambda: Section([], [], n=0.03), "profile-too-short", ["0 point", "profile"]),
    "two lengths": (
        lambda: Section([0, 1], [1, 2, 3], n=0.03),
        "profile-too-short",
        ["(2,)", "(3,)", "one length"],
    ),
    "a table": (lambda: Section([[0, 1]], [[1, 2]], n=0.03), "profile-too-short", ["(1, 2)"]),
    "no width": (lambda: Section([3, 3], [1, 2], n=0.03), "profile-too-short", ["all points", "station 3"]),
    "gap in the ground": (
        lambda: Section([0, 1, 2], [1, NAN, 2], n=0.03),
        "number-not-finite",
        ["nan", "point 2 of 3"],
    ),
    "endless station": (
        lambda: Section([0, INF], [1, 2], n=0.03),
        "number-not-finite",
        ["inf", "point 2 of 2"],
    ),
    "stations fall": (
        lambda: Section([0, 5, 4, 9], [1, 0, 0, 1], n=0.03),
        "station-decreases",
        ["station 5 is followed by 4", "point 3 of 4", "vertical face"],
    ),
    "n and subareas": (
        lambda: Section(X, Z, [Subarea(0, 10, 0.03)], n=0.03),
        "key-conflict",
        ["subareas", "n", "Section"],
    ),
    "neither n nor subareas": (lambda: Section(X, Z), "key-conflict", ["subareas", "n", "Section"]),
    "no subarea": (lambda: Section(X, Z, []), "subareas-do-not-cover", ["no subarea"]),
    "subareas too short": (
        lambda: Section(X, Z, [Subarea(0, 9, 0.03)]),
        "subareas-do-not-cover",
        ["from 0 to 9", "from 0 to 10"],
    ),
    "subareas start late": (
        lambda: Section(X, Z, [Subarea(1, 10, 0.03)]),
        "subareas-do-not-cover",
        ["from 1 to 10"],
    ),
    "gap between subareas": (
        lambda: Section(X, Z, [Subarea(0, 4, 0.03), Subarea(5, 10, 0.03)]),
        "subareas-do-not-cover",
        ["a gap between 4 and 5"],
    ),
    "overlap of subareas": (
        lambda: Section(X, Z, [Subarea(0, 6, 0.03), Subarea(5, 10, 0.03)]),
        "subareas-do-not-cover",
        ["an overlap between 6 and 5"],
    ),
    "unknown units": (lambda: rectangle(units="metric"), "value-not-allowed", ["'metric'", "units", '"si"']),
    "unknown composite": (
        lambda: rectangle(composite="mean"),
        "value-not-allowed",
        ["'mean'", "Section", "divide, horton"],
    ),
    "origin outside": (lambda: rectangle(origin=11), "station-outside", ["origin 11", "0 to 10"]),
    "origin is not a number": (lambda: rectangle(origin=NAN), "station-outside", ["origin nan", "0 to 10"]),
    "n of zero": (lambda: Section(X, Z, n=0.0), "number-not-positive", ["n is 0", "0.0 to 10.0"]),
    "n below zero": (lambda: Subarea(0, 1, -0.03, "reeds"), "number-not-positive", ["n is -0.03", "'reeds'"]),
    "n is not a number": (lambda: Subarea(0, 1, NAN), "number-not-positive", ["n is nan"]),
    "limit is not a number": (
        lambda: Subarea(0, NAN, 0.03, "reeds"),
        "number-not-finite",
        ["limit", "'reeds'"],
    ),
    "subarea without width": (
        lambda: Subarea(2, 2, 0.03, "reeds"),
        "value-not-allowed",
        ["no width", "'reeds'", "start be less than end"],
    ),
    "unknown zone": (
        lambda: Subarea(0, 1, 0.03, zone="bank"),
        "value-not-allowed",
        ["'bank'", "left floodplain, channel"],
    ),
    "n that grows with depth": (
        lambda: DepthRoughness(0.03, 1, 0.05, 2),
        "value-not-allowed",
        ["0.03 at depth 1", "0.05 at 2", "falls"],
    ),
    "depths in the wrong order": (
        lambda: DepthRoughness(0.05, 2, 0.03, 1),
        "value-not-allowed",
        ["depth 2", "0.03 at 1", "shallow depth"],
    ),
    "depth below zero": (lambda: DepthRoughness(0.05, -1, 0.03, 1), "value-not-allowed", ["depth -1"]),
    "deep n of zero": (
        lambda: DepthRoughness(0.05, 1, 0, 2),
        "number-not-positive",
        ["deep n is 0", "roughness"],
    ),
    "stage is not a number": (lambda: rectangle().geometry([1, NAN]), "number-not-finite", ["stage"]),
    "endless stage": (lambda: rectangle().conveyance(INF), "number-not-finite", ["stage"]),
    "slope of zero": (
        lambda: rectangle().discharge(1, 0),
        "number-not-positive",
        ["slope is 0", "above zero"],
    ),
    "slope below zero": (
        lambda: rectangle().normal_stage(1, [0.01, -0.01]),
        "number-not-positive",
        ["slope is -0.01"],
    ),
    "slope is not a number": (lambda: rectangle().discharge(1, NAN), "number-not-finite", ["slope"]),
    "discharge below zero": (
        lambda: rectangle().normal_stage(-3, 0.01),
        "number-not-positive",
        ["discharge is -3"],
    ),
    "discharge is not a number": (
        lambda: rectangle().critical_stage(NAN),
        "number-not-finite",
        ["discharge"],
    ),
    "no discharge has no paths": (
        lambda: rectangle().flow_paths(0, 0.01),
        "number-not-positive",
        ["discharge is 0"],
    ),
    "no discharge has no slope": (
        lambda: rectangle().slope_for(0, 1),
        "number-not-positive",
        ["discharge is 0"],
    ),
    "hollow outside": (
        lambda: rectangle().reached([(12, 14)]),
        "station-outside",
        ["12 and 14", "R-7", "0 and 10"],
    ),
    "hollow from right to left": (
        lambda: rectangle().reached([(6, 4)]),
        "station-outside",
        ["6 and 4", "left to right"],
    ),
    "no steps": (
        lambda: rectangle().rating(0.01, 0),
        "value-not-allowed",
        ["0 stages", "rating", "one or more"],
    ),
    "rating of a stage that is none": (
        lambda: rectangle().rating(0.01, [1, NAN]),
        "number-not-finite",
        ["stages"],
    ),
    "unknown subarea": (
        lambda: halves().n_for(5, 1, 0.01, "reeds"),
        "value-not-allowed",
        ["'reeds'", "R-7", "'left', 'right'"],
    ),
    "label of two": (
        lambda: halves("bed", "bed").n_for(5, 1, 0.01, "bed"),
        "value-not-allowed",
        ["more than one", "'bed'", "index from 0 to 1"],
    ),
    "index too high": (lambda: halves().n_for(5, 1, 0.01, 2), "value-not-allowed", ["subarea 2", "0 to 1"]),
}


@pytest.mark.parametrize(("call", "code", "words"), WRONG.values(), ids=WRONG.keys())
def test_wrong_input(call, code, words):
    with pytest.raises(InputError) as caught:
        call()
    error = caught.value
    assert error.code == code
    text = str(error)
    for word in words:
        assert word in text
    assert error.where
    assert error.fix
    assert f"where: {error.where}" in text
    assert f"fix:   {error.fix}" in text
    assert isinstance(error, ValueError)


@pytest.mark.parametrize("name", ["one point", "stations fall", "gap in the ground", "no width"])
def test_wrong_ground_is_a_profile_error(name):
    with pytest.raises(ProfileError):
        WRONG[name][0]()


DRY = Section([0, 0, 5, 5, 6, 6, 10, 10], [9, 0, 0, 3, 3, 1, 1, 9],
              [Subarea(0, 5, 0.03, "bed"), Subarea(5, 10, 0.05, "hollow")], section_id="R-8")  # fmt: skip

NO_ANSWER = {
    "slope of a dry section": (
        lambda: DRY.slope_for(1.0, [2.0, -1.0]),
        0.0,
        ["dry at stage -1", "R-8", "lowest ground, 0"],
    ),
    "roughness of a dry section": (lambda: DRY.n_for(1.0, -1.0, 0.01), 0.0, ["dry at stage -1", "R-8"]),
    "roughness of a dry subarea": (
        lambda: DRY.n_for(1.0, 2.0, 0.01, "hollow"),
        DRY.discharge(2.0, 0.01),
        ["hollow is dry at stage 2", "R-8"],
    ),
    "others carry it all": (
        lambda: halves().n_for(1.0, 2.0, 0.01, 1),
        Section([0, 0, 5], [5, 0, 0], n=0.03).discharge(2.0, 0.01),
        ["at stage 2 the other subareas carry", "not less than 1", "R-7", "lower stage"],
    ),
}


@pytest.mark.parametrize(("call", "nearest", "words"), NO_ANSWER.values(), ids=NO_ANSWER.keys())
def test_no_answer(call, nearest, words):
    with pytest.raises(NoAnswerError) as caught:
        call()
    error = caught.value
    assert error.code == "no-answer"
    assert error.nearest == pytest.approx(nearest, rel=1e-9)
    for word in words:
        assert word in str(error)
    assert error.fix
    assert isinstance(error, ArithmeticError)


def test_sections_without_a_name_still_say_where():
    nameless = Section(X, Z, n=0.03)
    with pytest.raises(NoAnswerError) as caught:
        nameless.slope_for(1.0, -1.0)
    assert caught.value.where == "Section"
    with pytest.raises(NoAnswerError) as caught:
        nameless.n_for(1.0, -1.0, 0.01, 0)
    assert caught.value.where == "Section"


def test_what_was_given_cannot_be_changed_behind_a_section():
    x = np.array(X)
    s = Section(x, Z, n=0.03)
    x[2] = 99.0
    assert s.stations[2] == 10.0
    with pytest.raises(ValueError, match="read-only"):
        s.elevations[0] = 1.0
