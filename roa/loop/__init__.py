"""Room 1, *what is simulated?*: the TOML file, formulas, states, equilibrium, linearisation."""
