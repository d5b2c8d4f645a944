"""Room 3, *what can be claimed?*: Lyapunov equation, remainder bounds, contact level."""
