"""Numbers of nature and of the signals, each with its source.  Holds no formula longer than a line."""

import math

SPEED_OF_LIGHT_M_S = 299_792_458.0  # SI, exact

# Ionospheric refraction: delay [m] = K * content [electrons/m^2] / f^2.  40.3 is the convention of IS-GPS-200 and
# IONEX practice (CODATA would give 40.308); one value everywhere, never mixed.
REFRACTION_M3_S2 = 40.3
TECU = 1e16  # electrons per square metre in one total-electron-content unit (definition)

# Carrier frequencies [Hz].  IS-GPS-200 (L1, L2), IS-GPS-705 (L5), Galileo OS SIS ICD, BeiDou B1I/B3I/B1C/B2a ICDs.
L1_HZ = 1575.42e6
L2_HZ = 1227.60e6
L5_HZ = 1176.45e6
E5B_HZ = 1207.14e6
E5_HZ = 1191.795e6
E6_HZ = 1278.75e6
B1I_HZ = 1561.098e6
B3I_HZ = 1268.52e6
# GLONASS FDMA: base and step per channel (GLONASS ICD 5.1, 2008, section 3.3.1.1); G3 is CDMA.
G1_HZ, G1_STEP_HZ = 1602.0e6, 0.5625e6
G2_HZ, G2_STEP_HZ = 1246.0e6, 0.4375e6
G3_HZ = 1202.025e6

# Centre frequency by system letter and RINEX band digit (RINEX 3.05 tables 4 to 10).  GLONASS bands 1 and 2 depend on
# the channel and are not listed here: see `carrier_hz`.
BAND_HZ: dict[tuple[str, str], float] = {
    ("G", "1"): L1_HZ, ("G", "2"): L2_HZ, ("G", "5"): L5_HZ,
    ("J", "1"): L1_HZ, ("J", "2"): L2_HZ, ("J", "5"): L5_HZ, ("J", "6"): E6_HZ,
    ("E", "1"): L1_HZ, ("E", "5"): L5_HZ, ("E", "6"): E6_HZ, ("E", "7"): E5B_HZ, ("E", "8"): E5_HZ,
    ("C", "1"): L1_HZ, ("C", "2"): B1I_HZ, ("C", "5"): L5_HZ, ("C", "6"): B3I_HZ, ("C", "7"): E5B_HZ,
    ("C", "8"): E5_HZ, ("R", "3"): G3_HZ,
}  # fmt: skip


def carrier_hz(system: str, band: str, channel: int = 0) -> float:
    """Carrier frequency [Hz] of a RINEX system letter and band digit; GLONASS needs its channel (-7 to +6)."""
    if system == "R" and band == "1":
        return G1_HZ + channel * G1_STEP_HZ
    if system == "R" and band == "2":
        return G2_HZ + channel * G2_STEP_HZ
    return BAND_HZ[system, band]


# Delay on 1575.42 MHz per TECU: 0.162372 m.
L1_M_PER_TECU = REFRACTION_M3_S2 * TECU / L1_HZ**2

# Mean Earth radius of thin-shell geometry: IONEX maps use 6371 km (IONEX 1.0, Schaer et al. 1998).
SHELL_EARTH_RADIUS_M = 6_371_000.0
KM_PER_DEG = math.pi / 180.0 * SHELL_EARTH_RADIUS_M / 1000.0  # of latitude, on that sphere
# Satellite-based augmentation uses its own pair of radius and height (RTCA DO-229, A.4.4.10).
SBAS_EARTH_RADIUS_M = 6_378_136.3
SBAS_SHELL_HEIGHT_M = 350_000.0

# WGS 84 ellipsoid (NIMA TR8350.2).
WGS84_A_M = 6_378_137.0
WGS84_F = 1.0 / 298.257223563

EARTH_ROTATION_RAD_S = 7.2921151467e-5  # IS-GPS-200, 20.3.3.4.3
