"""A commented scenario to start from: a rim diameter, an erosion depth, and everything else explained."""

from __future__ import annotations

from gravbasin.errors import InputError

__all__ = ["starter_scenario"]

_TEXT = """\
# A gravbasin scenario: kilometres, with the unit in every name. Lines starting with # are defaults or choices.
name = "my structure"
note = "made by gravbasin init"
seed = 1

[crater]
rim_diameter_km = {diameter:g}        # final rim diameter before erosion
target_rock = "crystalline"   # or "sedimentary", or "mixed" with cover_thickness_km
# setting = "land"            # "marine" seals breccia and fractures early
# uplift_law = "stratigraphic"  # or "shield": twice the structural uplift

[history]
erosion_km = {erosion:g}             # rock stripped below the ground before impact
# erosion_rate_m_per_myr = 5  # instead of erosion_km, together with crater.age_myr
# burial_km = 0.0             # sediment laid over the eroded surface

# A dimension you have measured wins over its size law, for example:
# [dimensions]
# structural_uplift_km = 3.0

# Your map: with it, gravbasin takes the noise from the map and compares profiles.
# [observed]
# path = "my_map.nc"          # netCDF, CSV x,y,value, or GeoTIFF; metres, mGal
# centre_easting_km = 0.0
# centre_northing_km = 0.0

# Without a map the geological noise must be stated. These values are typical of an old craton at the station
# density of a national survey (common practice); delete the table once you give a map.
[noise]
sill_mgal = 12.0
range_km = 40.0
smoothness = 1.0
nugget_mgal = 1.0
"""


def starter_scenario(rim_diameter_km: float, erosion_km: float) -> str:
    """Text of a scenario file that runs as it is.

    Parameters
    ----------
    rim_diameter_km, erosion_km : float
        Final rim diameter and rock stripped since, km.

    Raises
    ------
    InputError
        Values no scenario accepts.
    """
    if not 2 < rim_diameter_km <= 300:
        raise InputError("--rim-diameter-km", rim_diameter_km, "must be above 2 and at most 300", "give kilometres")
    if not 0 <= erosion_km <= 50:
        raise InputError("--erosion-km", erosion_km, "must be from 0 to 50", "give kilometres")
    return _TEXT.format(diameter=rim_diameter_km, erosion=erosion_km)
