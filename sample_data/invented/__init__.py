"""An invented receiver network under an invented ionosphere: the project's world with known truth.

Simulates three days of a made-up regional network in three dimensions and writes them as standard files.  Shares no
formula with the estimator: the electron density here is integrated along straight rays; there is no thin shell, except
for the sheet that carries the irregular patch.  Never used when real files are processed.

    places          receivers, sites and the region
    constellations  nominal GPS and Galileo orbits, satellite clocks and biases, the navigation file
    plasma          electron density, slant and vertical content
    weather         the scenario: levels over the three days, the wall, the patch, and what a test may override
    network         the in-memory door: `simulate`, `small_world`
    files           RINEX text, Hatanaka and gzip, without time stamps
    truth           what was put in, kept beside the files
"""
