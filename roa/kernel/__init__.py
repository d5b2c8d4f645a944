"""Room 2, *how is it computed?*: generated lanes, Runge-Kutta tableaux, interval evaluation."""
