"""Room 5, *what does it amount to?*: fractions, volumes, intervals, comparison, verdict."""
