"""NetCDF files of profiles (floats, ragged arrays): told apart and refused, each for the right reason."""

from pathlib import Path

from habitat.errors import InputError
from habitat.ocean import roles
from habitat.ocean.recognise import open_netcdf


def refuse_profiles(path: str | Path) -> InputError:
    """Build the error for a netCDF file of profiles: what it lacks, or that this kind is not read."""
    with open_netcdf(path) as metadata:
        attributes = {str(name): v.attrs for name, v in metadata.variables.items() if v.dtype.kind in "fiu"}
        held = {role for role in roles.WATER if roles.by_attributes(role, attributes)}
        shape = metadata.attrs.get("featureType", "profiles")
        argo = {"N_PROF", "N_LEVELS"} <= set(metadata.sizes)
    kind = "an Argo profile file" if argo else f"a netCDF file of featureType '{shape}'"
    missing = [role for role in roles.WATER if role not in held]
    if "oxygen" in missing:
        return InputError(
            f"{kind} that has no oxygen", where=str(path), expected="temperature, salinity and oxygen together"
        )
    if missing:
        remedy = "take the synthetic profile of the same float, which joins them" if argo else ""
        return InputError(
            f"{kind} with oxygen, but {' and '.join(missing)} missing",
            where=str(path),
            expected="temperature, salinity and oxygen together",
            remedy=remedy,
        )
    return InputError(
        f"this kind of file ({kind}) is not read yet",
        where=str(path),
        expected="a CSV table, a WHP-Exchange file or a netCDF grid",
        remedy="write its profiles as a CSV table with a column 'cast'",
    )
