"""The messages that users meet."""

import pytest

from habitat.errors import HabitatError, InputError, OutputError, UnitError


@pytest.mark.parametrize(
    ("parts", "message"),
    [
        ({}, "depth -5 m"),
        ({"where": "cast.csv"}, "cast.csv: depth -5 m"),
        ({"expected": "0 m or more"}, "depth -5 m; expected 0 m or more"),
        ({"remedy": "check the sign"}, "depth -5 m; check the sign"),
        (
            {"where": "cast.csv", "expected": "0 m or more", "remedy": "check the sign"},
            "cast.csv: depth -5 m; expected 0 m or more; check the sign",
        ),
    ],
)
def test_message_says_where_what_expected_and_remedy(parts, message):
    error = InputError("depth -5 m", **parts)
    assert str(error) == message
    assert error.found == "depth -5 m"
    assert (error.where, error.expected, error.remedy) == tuple(
        parts.get(k, "") for k in ("where", "expected", "remedy")
    )


@pytest.mark.parametrize(
    ("error", "builtin"), [(InputError, ValueError), (UnitError, ValueError), (OutputError, OSError)]
)
def test_errors_are_ours_and_also_of_a_builtin_kind(error, builtin):
    with pytest.raises(HabitatError, match=r"^here: it broke$"):
        raise error("it broke", where="here")
    with pytest.raises(builtin, match=r"^here: it broke$"):
        raise error("it broke", where="here")


def test_a_unit_error_is_an_input_error_but_an_output_error_is_not():
    assert issubclass(UnitError, InputError)
    assert not issubclass(OutputError, InputError)
