"""NetCDF profile files are refused for the right reason."""

import pytest

from habitat.errors import InputError
from habitat.ocean import open_ocean


@pytest.mark.parametrize(
    ("name", "message"),
    [
        ("bgc_only_profile.nc", "an Argo profile file with oxygen, but temperature and salinity missing; .*synthetic"),
        ("ragged_profiles_no_oxygen.nc", "featureType 'Profile' that has no oxygen"),
        ("synthetic_profile_one.nc", r"this kind of file \(an Argo profile file\) is not read yet"),
        ("tabular_profiles.nc", r"\(a netCDF file of featureType 'TrajectoryProfile'\) is not read yet"),
    ],
)
def test_refused_for_the_right_reason(data, name, message):
    with pytest.raises(InputError, match=message):
        open_ocean([data / "floats" / name])
