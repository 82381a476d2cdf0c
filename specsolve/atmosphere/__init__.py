"""Model atmospheres in radiative-convective equilibrium, and their store."""
