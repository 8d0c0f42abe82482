"""Before the measurement: tables of shots, what they can resolve, which shots to take."""
