"""Statistical equilibrium of iron: model atom, rates, radiation, departures from local thermodynamic equilibrium."""
