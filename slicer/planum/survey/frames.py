"""The coordinate reference system named in a survey: projected, in metres, by code."""

from __future__ import annotations

import re

from pydantic_core import PydanticCustomError
from pyproj import CRS
from pyproj.exceptions import CRSError

from planum.errors import printable

__all__ = ["check_crs"]

_ADVICE = "name the projected system of the control points, such as the national grid or a UTM zone (EPSG:25832)"


def _wrong(came: str, allowed: str, do: str) -> PydanticCustomError:
    return PydanticCustomError("planum", "{came}; {allowed}; {do}", {"came": came, "allowed": allowed, "do": do})


def check_crs(text: str) -> str:
    """Return a CRS code as typed when it names a projected system with axes in metres.

    Only codes (``AUTHORITY:CODE``, compound ``EPSG:25832+7837``) are accepted: longer forms can name grid files
    that the transformation would open.

    Raises
    ------
    PydanticCustomError
        When the code is unknown, geographic, geocentric, local or not in metres.
    """
    code = text.strip()
    if not re.fullmatch(r"(EPSG|ESRI|IGNF):[A-Za-z0-9._]{1,20}(\+[0-9]{1,8})?", code, re.IGNORECASE):
        raise _wrong(f"the crs {printable(text, longest=60)!r} is not a code", "a code such as EPSG:25832", _ADVICE)
    try:
        crs = CRS.from_user_input(code)
    except CRSError:
        raise _wrong(f"the crs {code!r} is not known", "a code such as EPSG:25832", _ADVICE) from None
    plan = crs.sub_crs_list[0] if crs.is_compound else crs
    if plan.is_geographic:
        raise _wrong(
            f"the crs {code!r} ({plan.name}) is geographic, in degrees", "a projected system in metres", _ADVICE
        )
    if not plan.is_projected:
        raise _wrong(f"the crs {code!r} ({plan.name}) is not projected", "a projected system in metres", _ADVICE)
    units = sorted({axis.unit_name for axis in plan.axis_info})
    if units != ["metre"]:
        raise _wrong(f"the crs {code!r} ({plan.name}) is in {' and '.join(units)}", "a system in metres", _ADVICE)
    return code
