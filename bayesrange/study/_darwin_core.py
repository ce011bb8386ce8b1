"""Darwin Core column names, understood without being named in the study file.

Terms of the TDWG Darwin Core list: organismID, eventDate, decimalLongitude, decimalLatitude, geodeticDatum,
coordinateUncertaintyInMeters. The uncertainty is the radius of a circle that holds the place; read as a 95 % circle of
an error that is normal with the same sd on both axes, sd = radius / 2.4477 (= √(−2 ln 0.05)).
"""

import pandas as pd

from bayesrange._errors import StudyError
from bayesrange.study._settings import FixesSection

UNCERTAINTY = "coordinateUncertaintyInMeters"
SD_PER_RADIUS = 1 / 2.4477
_TERMS = {
    "animal": "organismID",
    "time": "eventDate",
    "x": "decimalLongitude",
    "y": "decimalLatitude",
    "error": UNCERTAINTY,
}


def with_darwin_core(section: FixesSection, table: pd.DataFrame, name: str) -> FixesSection:
    """The `[fixes]` section with these terms where the study file names no column and the default one is absent.

    Where longitude and latitude are found so, their system is the file's geodeticDatum, or else EPSG:4326.

    Raises:
        StudyError: more than one geodeticDatum in a file.
    """
    found = {
        key: term
        for key, term in _TERMS.items()
        if key not in section.model_fields_set and getattr(section, key) not in table.columns and term in table.columns
    }
    if {"x", "y"} <= found.keys() and section.crs is None:
        datums = sorted(set(table.get("geodeticDatum", pd.Series(dtype=str))) - {""})
        if len(datums) > 1:
            raise StudyError(f"{name}: geodeticDatum is not the same in all rows ({', '.join(datums)}); make it one.")
        found["crs"] = datums[0] if datums else "EPSG:4326"
    return section.model_copy(update=found)
