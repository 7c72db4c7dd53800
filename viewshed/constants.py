"""Numbers and words that several modules share."""

#: Refraction coefficient that surveying uses when nothing else is known [1] (Gauss, 1826).
SURVEY_K = 0.13
#: Effective Earth factor of the radio standard atmosphere [1] (ITU-R P.310).
RADIO_EARTH_FACTOR = 4.0 / 3.0

#: Eye height of a standing person [m].
DEFAULT_EYE_HEIGHT = 1.7
#: Target height [m]: the ground itself.
DEFAULT_TARGET_HEIGHT = 0.0
#: Farthest ground distance considered when none is given [m].
DEFAULT_RANGE = 30_000.0

#: Values of the `visible` layer.
HIDDEN = 0
VISIBLE = 1
UNRESOLVED = 2
NODATA = 255

#: Layers a map can have; the file of a layer is its name with the hyphen as an underscore.
LAYERS = ("visible", "clearance", "needed-height", "count", "count-unresolved", "who")
#: No data in the layers `count` and `count-unresolved`.
COUNT_NODATA = 65535
#: Most observers of one map, and most that the bits of the layer `who` can tell apart.
MOST_OBSERVERS, WHO_OBSERVERS = COUNT_NODATA - 1, 32

#: Cautions that go with every result.
CAUTIONS = (
    "The result is a model of the terrain it was given and is no better than the elevation grid.",
    "Vegetation and buildings count only if they are in the surface.",
    "Real air differs from the stated k, most of all within a few metres of warm or cold ground.",
    "Heights are used in the datum they come in.",
    "Not for navigation, flight safety or aiming; links, lights, aviation obstacles and planning "
    "evidence follow local codes and need the licensed professional they call for.",
)
