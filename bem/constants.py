"""Physical constants."""

__all__ = ["EPSILON_0", "FOUR_PI_EPSILON_0"]

#: Electric constant, F/m, CODATA 2022 (from memory; relative uncertainty 1.6e-10).
EPSILON_0 = 8.8541878188e-12

#: 4 pi epsilon_0, F/m: the capacitance of a sphere of 1 m radius.
FOUR_PI_EPSILON_0 = 4.0 * 3.141592653589793 * EPSILON_0
