"""Will it clip? Recordings run through the stage: headroom, visits to limits, the largest clean input."""
