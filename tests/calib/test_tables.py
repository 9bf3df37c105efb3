"""Tables of TOML files: all that is wrong with one is found, and a bad key hides nothing of the good ones."""

from typing import Annotated

import pytest
from msgspec import Meta, Struct
from skewline.calib.tables import checked_table, read_table


class Lamp(Struct, frozen=True, kw_only=True, forbid_unknown_fields=True):
    watts: Annotated[float, Meta(gt=0, le=500)]
    places: Annotated[list[int], Meta(min_length=1)]
    name: str = "lamp"
    spare: Annotated[int, Meta(ge=0)] | None = None

    def __post_init__(self) -> None:
        if self.spare is not None and self.spare > len(self.places):
            raise ValueError(f"`spare` is {self.spare}; expected no more than there are places")


def test_every_fault_of_a_table_is_found_unknown_and_missing_and_bad_ones() -> None:
    reading = read_table({"wats": 5, "places": [1, "x"], "name": 7, "spare": -1, "hue": {}}, Lamp, "lamp")

    assert reading.value is None
    assert reading.faults == (
        "lamp.wats (5) is no key of [lamp]; expected one of name, places, spare, watts; did you mean watts?",
        "lamp.hue (a table) is no key of [lamp]; expected one of name, places, spare, watts",
        "lamp.watts is missing; expected a number above 0 and at most 500",
        "lamp.places[1] is 'x'; expected a list (a whole number each, one or more)",
        "lamp.name is 7; expected text",
        "lamp.spare is -1; expected a whole number at least 0",
    )


def test_what_is_sound_is_given_beside_the_faults_with_its_defaults() -> None:
    reading = read_table({"watts": 40, "places": [], "hue": 1}, Lamp, "lamp")

    assert reading.sound == {"watts": 40.0, "name": "lamp", "spare": None}
    assert len(reading.faults) == 2


def test_an_unknown_key_alone_does_not_keep_the_rest_from_being_used() -> None:
    reading = read_table({"watts": 40, "places": [3], "hue": 1}, Lamp, "lamp")

    assert reading.value == Lamp(watts=40, places=[3])
    assert len(reading.faults) == 1
    with pytest.raises(ValueError, match=r"^lamp\.hue \(1\) is no key"):
        checked_table({"watts": 40, "places": [3], "hue": 1}, Lamp, "lamp", ValueError)


def test_what_the_value_class_says_of_the_whole_comes_where_each_key_is_good() -> None:
    reading = read_table({"watts": 40, "places": [3], "spare": 2}, Lamp, "lamp")

    assert (reading.value, reading.faults) == (None, ("lamp: `spare` is 2; expected no more than there are places",))


def test_a_zero_byte_which_no_path_can_hold_is_refused() -> None:
    reading = read_table({"watts": 40, "places": [3], "name": "a\0b"}, Lamp, "lamp")

    assert reading.faults == (r"lamp.name is 'a\x00b'; expected text, without a zero byte",)
