"""What moves an element from its nominal value."""

MOVES = ("tolerance", "temperature", "drift")
"""In the order of every array of spreads."""

TOLERANCE, TEMPERATURE, DRIFT = range(3)
