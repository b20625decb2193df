"""Stars of an arc, how often they flare, and what else flares there."""
