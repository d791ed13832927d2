"""Physics with its sources, and the bounds the program trusts.

Units: m, ns, m/ns, GHz.
"""

SPEED_OF_LIGHT = 0.299792458
"""m/ns, exact (SI)."""

WINDOW_NS = (5.0, 5000.0)
"""Shortest and longest believable recording window; outside it the interval's unit was misread (common practice)."""

VELOCITY_RANGE = (0.03, SPEED_OF_LIGHT)
"""m/ns: fresh water is 0.033 (Davis & Annan 1989, table 1), nothing is faster than light."""

SAMPLES_PER_PERIOD_LEAST = 4.0
SAMPLES_PER_PERIOD_GOOD = 8.0
"""Samples per period of the centre frequency: below the first refused, below the second warned (common practice:
six is the classic rule, eight the teaching rule)."""

MASK_BETWEEN = 0.6
"""Line spacings: a cell farther than this from the nearest trace is not shown."""
MASK_OUTSIDE = 0.5
"""Line spacings: the same beyond the outer lines."""
LIMIT_MARGIN = 0.02
"""A filled value leaves the range of the neighbouring lines by no more than this share of it."""

CAUTIONS = (
    "Depth slices are no clearance to dig: buried services are located by licensed practice"
    " under the local permit-to-dig rules.",
    "Unexploded ordnance, human remains and protected monuments have their own law and licences;"
    " radar transmitters may need a radio licence.",
    "Every depth carries an error and refers to a surface; absence of an anomaly is not absence of archaeology.",
)
"""Shown in the report, on every sheet, in the GIS layers' metadata and in the command's help; never lifted."""
