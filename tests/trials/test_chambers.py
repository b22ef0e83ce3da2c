"""The chamber table: volumes, flush periods, background slopes, and what is refused."""

import numpy as np
import pytest

from habitat.errors import InputError, UnitError
from habitat.trials.chambers import Background, read_chambers, slope_unit

HEAD = "trial,volume [ml],mass [g]"


def test_plain_table(write):
    chambers = read_chambers(write(HEAD + "\na,1000,50\nb,500,20\n"))
    assert list(chambers) == ["a", "b"]
    assert chambers["a"].water == pytest.approx(0.95)  # 50 g take 50 ml
    assert (chambers["a"].individual, chambers["a"].mass, chambers["a"].flushes) == ("a", 50, ())
    assert (chambers["a"].before, chambers["a"].after) == (None, None)


def test_units_change_nothing(write):
    plain = read_chambers(write(HEAD + "\na,1000,50\n"))["a"]
    other = read_chambers(write("trial,volume [l],mass [kg]\na,1,0.05\n"))["a"]
    assert other.water == pytest.approx(plain.water)
    assert other.mass == pytest.approx(plain.mass)


def test_optional_columns(write):
    text = (
        HEAD + ",individual,kind,flush [min],background_before [mg/l/h],background_after [kPa/min]\n"
        "a,1000,50,cod 1,intermittent,25-30; 10.5-15,-0.2,-0.01\nb,1000,50,,closed,,,\n"
    )
    chambers = read_chambers(write(text))
    assert chambers["a"].individual == "cod 1"
    np.testing.assert_allclose(chambers["a"].flushes, [(10.5 / 60, 0.25), (25 / 60, 0.5)])
    assert chambers["a"].before == Background(pytest.approx(-6.2502, abs=1e-4), "umol/l")  # 62.502 per 2 mg/l: facts C7
    assert chambers["a"].after == Background(pytest.approx(-0.6), "kPa")
    assert (chambers["b"].individual, chambers["b"].flushes, chambers["b"].before) == ("b", (), None)


@pytest.mark.parametrize(
    ("text", "oxygen", "factor"),
    [
        ("umol/l/h", "umol/l", 1.0),
        ("umol l-1 min-1", "umol/l", 60.0),
        ("mmol/m3/d", "umol/l", 1 / 24),
        ("% saturation/h", "% saturation", 1.0),
        ("umol kg-1 h-1", "umol kg-1", 1.0),
        ("kPa per s", "kPa", 3600.0),
    ],
)
def test_units_of_slopes(text, oxygen, factor):
    unit, value = slope_unit(text)
    assert unit == oxygen
    assert value == pytest.approx(factor)


@pytest.mark.parametrize("text", ["umol/l", "h", "kPa", "m/h", "kPa/m", "furlong"])
def test_units_of_no_slope(text):
    with pytest.raises(UnitError, match=f"unit '{text}' is not one of a background slope; expected oxygen per time"):
        slope_unit(text)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("trial,mass [g]\na,1\n", r"no column 'volume'; expected the heading 'volume \[ml\]'"),
        ("trial,volume,mass [g]\na,1,1\n", r"heading 'volume' states no unit"),
        (HEAD + "\na,100,1\nb,100,1\na,100,2\n", "trial 'a': 2 rows, in lines 2, 4; expected one row for each trial"),
        (HEAD + "\na,,1\n", "trial 'a': volume nan l and mass 1 g; expected both to be there and above 0"),
        (HEAD + "\na,100,0\n", "trial 'a': volume 0.1 l and mass 0 g"),
        (HEAD + "\na,1,50\n", "trial 'a': an animal of 50 g leaves no water in a chamber of 0.001 l"),
        (HEAD + ",kind\na,100,1,open\n", "trial 'a': kind 'open'; expected 'closed' or 'intermittent'"),
        (HEAD + ",kind\na,100,1,intermittent\n", "trial 'a': an intermittent chamber without flush periods"),
        (HEAD + ",kind,flush [min]\na,100,1,closed,1-2\n", "trial 'a': a closed chamber with flush periods '1-2'"),
        (HEAD + ",flush\na,100,1,1-2\n", r"heading 'flush' states no unit"),
        (HEAD + ",flush [kPa]\na,100,1,1-2\n", r"column 'flush \[kPa\]': unit 'kPa' cannot be converted"),
        (
            HEAD + ",flush [min]\na,100,1,1-2;soon\n",
            "trial 'a': 'soon' in flush periods '1-2;soon'; expected start and end",
        ),
        (HEAD + ",flush [min]\na,100,1,5-2\n", "'5-2' in flush periods '5-2'"),
        (HEAD + ",flush [min]\na,100,1,1-5;4-6\n", "flush periods that overlap: '1-5;4-6'"),
        (
            HEAD + ",background_after [m]\na,100,1,1\n",
            r"column 'background_after \[m\]': unit 'm' is not one of a backgr",
        ),
    ],
)
def test_unusable_tables(write, text, message):
    with pytest.raises(InputError, match=message):
        read_chambers(write(text))
