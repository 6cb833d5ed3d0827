"""Published formula of two gratings, worked to six digits: f1, f2, angle, beat, its period and direction."""

# Source: two-grating moire, f^2 = f1^2 + f2^2 - 2 f1 f2 cos a and phi = atan2(-f2 sin a, f1 - f2 cos a)
# (Amidror, The Theory of the Moire Phenomenon, 2.3, formula from memory; figures computed from it).
TWO_GRATINGS = [
    (150, 150, 1, 2.617961, 9.702208, -89.5),
    (150, 150, 5, 13.085816, 1.941033, -87.5),
    (150, 150, 15, 39.157858, 0.648657, -82.5),
    (150, 150, 30, 77.645714, 0.327127, -75.0),
    (150, 133, 0, 17.000000, 1.494118, 0.0),
    (150, 133, 15, 40.602457, 0.625578, -57.973637),
    (133, 150, 30, 75.063882, 0.338378, -87.636028),
    (85, 100, 7.5, 19.246749, 1.319703, -137.298987),
    (175, 175, 0.1, 0.305433, 83.160742, -89.95),
    (60, 65, 3, 5.974080, 4.251701, -145.289315),
    (120, 100, 45, 86.194183, 0.294683, -55.121333),
]
