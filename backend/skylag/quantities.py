"""The vocabulary: name, unit, dtype, label and meaning of every quantity that leaves the program, once each.

Feeds the field descriptions and axis labels of the web interface and the glossary for developers.  Never computes.
"""

from dataclasses import dataclass


@dataclass(frozen=True)
class Quantity:
    """One word of the vocabulary.  unit "" means a pure number or a word; dtype is numpy's name for how it is kept."""

    name: str
    unit: str
    dtype: str
    label: str
    meaning: str


QUANTITIES: tuple[Quantity, ...] = (
    # Maps
    Quantity("vertical_delay", "m", "float32", "Vertical delay",
             "extra path of a 1575.42 MHz signal from straight overhead, caused by the ionosphere"),
    Quantity("vertical_delay_sigma", "m", "float32", "Uncertainty of vertical delay",
             "standard deviation of the vertical delay, all parts together"),
    Quantity("vtec", "TECU", "float32", "Vertical electron content",
             "electrons in a vertical column, in units of 1e16 per square metre"),
    Quantity("vtec_sigma", "TECU", "float32", "Uncertainty of vertical electron content",
             "standard deviation of the vertical electron content, all parts together"),
    Quantity("support", "", "uint16", "Lines of sight",
             "how many lines of sight carry the value of a cell; 0 where nothing was seen"),
    Quantity("slope", "mm/km", "float32", "Slope of delay",
             "how fast the vertical delay on 1575.42 MHz changes over the ground, in its steepest direction"),
    Quantity("slope_sigma", "mm/km", "float32", "Uncertainty of slope", "standard deviation of the slope"),
    Quantity("slope_east", "mm/km", "float32", "Slope toward east", "growth of the vertical delay per km toward east"),
    Quantity("slope_north", "mm/km", "float32", "Slope toward north",
             "growth of the vertical delay per km toward north"),
    Quantity("state", "", "uint8", "State",
             "do corrections hold at a place and time: "
             "0 unseen (not enough data to say), 1 holds, 2 strained, 3 broken"),
    # Lines of sight
    Quantity("elevation", "deg", "float32", "Elevation", "angle of a satellite above the receiver's horizon"),
    Quantity("azimuth", "deg", "float32", "Azimuth",
             "direction of a satellite from the receiver, from north over east"),
    Quantity("pierce_lat", "deg", "float32", "Pierce point latitude",
             "geographic latitude where a line of sight meets the shell"),
    Quantity("pierce_lon", "deg", "float32", "Pierce point longitude",
             "longitude east where a line of sight meets the shell"),
    Quantity("mapping", "", "float32", "Mapping", "slant over vertical electron content, at least 1"),
    Quantity("stec", "TECU", "float64", "Slant electron content",
             "electrons along a line of sight, in units of 1e16 per square metre, biases taken off"),
    # Biases
    Quantity("bias", "ns", "float64", "Code bias",
             "bias of the first code minus bias of the second, as in Bias-SINEX differential records"),
    Quantity("bias_sigma", "ns", "float64", "Uncertainty of code bias", "standard deviation of a code bias"),
    # Flags
    Quantity("speed", "m/s", "float64", "Speed", "how fast a front moves over the ground, across its own line"),
    Quantity("heading", "deg", "float64", "Heading", "direction a front moves toward, from north over east"),
    Quantity("roti", "TECU/min", "float64", "Rate-of-change index",
             "standard deviation over five minutes of the rate of change of slant electron content"),
)  # fmt: skip

BY_NAME: dict[str, Quantity] = {quantity.name: quantity for quantity in QUANTITIES}
