"""Lengths in words: what is understood, and what is refused with what was given."""

from dataclasses import replace

import numpy as np
import pytest
from made_up_result import bench_rig
from skewline.calib import CalibrationError
from skewline.calib.lengths import KnownLength, kept_baseline, parse_baseline, parse_baseline_of, parse_length


@pytest.mark.parametrize(
    ("text", "between", "length_m", "sigma_m"),
    [
        ("P Q 250mm", ("P", "Q"), 0.25, 0.5e-3),
        ("P Q 250mm 0.1mm", ("P", "Q"), 0.25, 1e-4),
        ("  left-edge  right-edge  1.2 m ", ("left-edge", "right-edge"), 1.2, 2.4e-3),
        ("1 2 25cm 0.02 cm", ("1", "2"), 0.25, 2e-4),
        ("P p .5M 0mm", ("P", "p"), 0.5, 0.0),
    ],
)
def test_a_line_gives_labels_length_and_deviation(
    text: str, between: tuple[str, str], length_m: float, sigma_m: float
) -> None:
    known = parse_length(text)

    assert known.between == between
    assert known.name == "-".join(between)
    assert known.length_m == pytest.approx(length_m)
    assert known.sigma_m == pytest.approx(sigma_m)


@pytest.mark.parametrize("text", ["", "P Q", "P 250mm", "P Q 250", "P Q 10in", "P Q 250mm 0.5", "P Q 2,5m", "P Q R 3m"])
def test_a_line_that_is_no_length_is_refused_with_what_was_given_and_an_example(text: str) -> None:
    with pytest.raises(CalibrationError, match=rf"length is '{text}'; expected two labels and a length .*P Q 250mm"):
        parse_length(text)


@pytest.mark.parametrize("text", ["P Q 0mm", "P Q -250mm", "P Q 0.2mm", "P Q 250000m"])
def test_zero_negative_and_absurd_lengths_are_refused(text: str) -> None:
    with pytest.raises(CalibrationError, match=r"length P-Q is .* m; expected 0.001 m to 1000 m: check .* unit"):
        parse_length(text)


@pytest.mark.parametrize("text", ["P Q 250mm -1mm", "P Q 250mm 100mm"])
def test_a_deviation_that_is_negative_or_beyond_a_third_is_refused(text: str) -> None:
    with pytest.raises(CalibrationError, match=r"length P-Q of 0.25 m has a standard deviation of .*; expected 0 to"):
        parse_length(text)


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_lengths_that_are_no_number_are_refused(value: float) -> None:
    with pytest.raises(CalibrationError, match="length target is"):
        KnownLength(name="target", length_m=value, sigma_m=0.0)
    with pytest.raises(CalibrationError, match="length target of 1 m has a standard deviation of"):
        KnownLength(name="target", length_m=1.0, sigma_m=value)


def test_one_label_for_both_ends_is_refused() -> None:
    with pytest.raises(CalibrationError, match="length P-P runs from 'P' to itself; expected the labels of two"):
        parse_length("P P 250mm")


def test_a_baseline_is_a_length_without_labels() -> None:
    known = parse_baseline("193mm 0.2mm")

    assert (known.name, known.between) == ("baseline", None)
    assert (known.length_m, known.sigma_m) == pytest.approx((0.193, 2e-4))
    with pytest.raises(CalibrationError, match="baseline is 'P Q 193mm'; expected a length in mm, cm or m, such as"):
        parse_baseline("P Q 193mm")


def test_the_baseline_of_an_earlier_rig_is_as_sure_as_its_covariance_says_along_it() -> None:
    rig = bench_rig()
    factor = np.random.default_rng(1).normal(size=(6, 6)) * 1e-4
    covariance = factor @ factor.T
    drawn = np.linalg.norm(
        rig.t + np.random.default_rng(2).multivariate_normal(np.zeros(6), covariance, 40_000)[:, 3:], axis=1
    )

    kept = kept_baseline(replace(rig, covariance=covariance), "bench.rig.json")

    assert kept.name == "baseline of bench.rig.json"
    assert kept.between is None
    assert kept.length_m == rig.baseline_m
    assert kept.sigma_m == pytest.approx(drawn.std(), rel=0.02)
    assert kept_baseline(rig, "bench.rig.json").sigma_m == 0


def test_the_baseline_of_a_rig_of_unknown_scale_is_no_length() -> None:
    with pytest.raises(CalibrationError, match=r"scale of old\.rig\.json is not known, so its baseline is no length"):
        kept_baseline(replace(bench_rig(), scale_known=False), "old.rig.json")


@pytest.mark.parametrize(
    ("text", "cameras", "length_m", "sigma_m"),
    [
        ("a c 193mm 0.2mm", ("a", "c"), 0.193, 0.0002),
        ("front far-left 41.2 cm", ("front", "far-left"), 0.412, 0.000824),
        ("193 mm 0.5 mm", None, 0.193, 0.0005),
    ],
)
def test_a_baseline_of_several_cameras_is_read_with_or_without_their_names(
    text: str, cameras: tuple[str, str] | None, length_m: float, sigma_m: float
) -> None:
    named, known = parse_baseline_of(text)

    assert named == cameras
    assert (known.length_m, known.sigma_m) == pytest.approx((length_m, sigma_m))
    assert known.between is None


def test_a_baseline_of_one_camera_alone_is_refused() -> None:
    with pytest.raises(CalibrationError, match="expected the names of two cameras and a length"):
        parse_baseline_of("a 193mm")
