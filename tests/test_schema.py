"""What is said of mistakes in TOML files."""

import pytest
from pydantic import Field, field_validator

from habitat.errors import InputError
from habitat.schema import Table, validate


class _Leg(Table):
    length: float = Field(gt=0, le=2)
    joints: int = 3


class _Animal(Table):
    name: str
    tame: bool = False
    legs: list[_Leg] = Field(default_factory=list)
    head: _Leg | None = None

    @field_validator("name")
    @classmethod
    def _is_capital(cls, name):
        if not name[:1].isupper():
            msg = f"found '{name}'; expected a capital letter first"
            raise ValueError(msg)
        return name


def test_a_right_table_is_returned_as_its_model():
    animal = validate(_Animal, {"name": "Crab", "legs": [{"length": 1}]}, "a.toml")
    assert (animal.name, animal.legs[0].length, animal.legs[0].joints, animal.tame) == ("Crab", 1.0, 3, False)


@pytest.mark.parametrize(
    ("content", "message"),
    [
        ({}, r"^a\.toml: key 'name' is missing; add it$"),
        ({"name": 3}, r'^a\.toml: name = 3; expected a text in double quotes \("\.\.\."\)$'),
        ({"name": "Crab", "tame": 1}, r"^a\.toml: tame = 1; expected true or false$"),
        ({"name": "Crab", "legs": {}}, r"^a\.toml: legs = \{\}; expected a list \[\.\.\.\]$"),
        ({"name": "Crab", "head": 1.5}, r"^a\.toml: head = 1\.5; expected a table$"),
        ({"name": "Crab", "head": {"length": "1"}}, r"^a\.toml: head\.length = '1'; expected a number$"),
        ({"name": "Crab", "head": {"length": True}}, r"^a\.toml: head\.length = True; expected a number$"),
        ({"name": "Crab", "head": {"length": 0}}, r"^a\.toml: head\.length = 0; expected more than 0"),
        ({"name": "Crab", "head": {"length": 3}}, r"^a\.toml: head\.length = 3; expected 2\.0 or less"),
        (
            {"name": "Crab", "head": {"length": float("inf")}},
            r"^a\.toml: head\.length = inf; expected a finite number$",
        ),
        ({"name": "Crab", "head": {"length": 1, "joints": 1.5}}, r"head\.joints = 1\.5; expected a whole number$"),
        ({"name": "crab"}, r"^a\.toml: name: found 'crab'; expected a capital letter first$"),
        ({"name": "Crab", "leg": []}, r"^a\.toml: unknown key 'leg'; did you mean 'legs'\?$"),
        ({"name": "Crab", "zzz": 1}, r"unknown key 'zzz'; known here: name, tame, legs, head$"),
        (
            {"name": "Crab", "legs": [{"length": 1}, {"length": 1, "joint": 2}]},
            r"^a\.toml: unknown key 'legs\[2\]\.joint'; did you mean 'joints'\?$",
        ),
        ({"name": "Crab", "head": {"lenght": 1}}, r"unknown key 'head\.lenght'; did you mean 'length'\? \(mistakes"),
        ({"name": "Crab", "tame": 1, "head": 2}, r"tame = 1; expected true or false; \(mistakes in this file: 2\)$"),
    ],
)
def test_the_first_mistake_is_explained(content, message):
    with pytest.raises(InputError, match=message):
        validate(_Animal, content, "a.toml")
