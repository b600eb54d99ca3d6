"""The fast engine: banded algebra, the mode of the states, the marginal likelihood and the fit."""
