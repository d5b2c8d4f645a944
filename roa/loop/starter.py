"""The configuration that `roa init` writes: a loop to start from, with every key explained."""

from __future__ import annotations

STARTER = """\
# A loop to start from. Everything after a # is a comment; replace what is yours and keep the rest.
#
# The example: a diving float holds its depth with a thruster. Its foam shrinks with depth, so the deeper it is
# the heavier it gets: left alone it sinks or surfaces, and 25 N of thrust cannot always stop it.

title = "Diving float that holds its depth with a limited thruster"

# A digital controller computes signals from samples every `period` and holds them; each acts `delay` after its sample.
# hold = { signals = ["thrust"], period = 0.1, delay = 0.05 }     # s; or as a table [hold] further down

[states]                    # name = unit, in order; "" where there is no unit
depth = "m"                 # below the set depth
speed = "m/s"               # downwards

[parameters]                # a number, or { value = …, unit = … }
mass       = { value = 60.0, unit = "kg" }          # with the water that moves along
softness   = { value = 18.0, unit = "N/m" }         # weight gained per metre
drag       = { value = 40.0, unit = "N s^2/m^2" }
k_p        = { value = 60.0, unit = "N/m" }
k_d        = { value = 90.0, unit = "N s/m" }
thrust_max = { value = 25.0, unit = "N" }

[signals]                   # intermediate quantities; each may use those above it
thrust = "clip(-k_p*depth - k_d*speed, -thrust_max, thrust_max)"

# Formulas know + - * / **, brackets, comparisons inside where(x < y, a, b), and the functions
# sin cos tan asin acos atan atan2 sinh cosh tanh exp log sqrt abs sign min max clip deadzone where.
[dynamics]                  # the time derivative of every state
depth = "speed"
speed = "(softness*depth - drag*speed*abs(speed) + thrust)/mass"

[equilibrium]               # a guess, refined by Newton; zero where a state has no entry
depth = 0.0
speed = 0.0

[domain]                    # the box that is studied
depth = [-2.0, 2.0]
speed = [-0.8, 0.8]

[disturbance]               # what varies with time anywhere in an interval; only proofs of an ultimate bound use it
# drag = [35.0, 45.0]       # a parameter, or a new name whose nominal value is the middle

[bound]                     # the Lyapunov function V
Q = "identity"              # from A'P + PA = -Q; or "domain", or a matrix [[2, 0], [0, 1]]
# P = [[1.0, 0.2], [0.2, 1.5]]              # or V = (x - x_eq)'P(x - x_eq) as given
# V = "depth**2 + depth*speed + speed**2"   # or a formula in states and parameters, zero at the equilibrium
# level = 0.05              # the claim that `roa validate` judges: {V <= level} lies in the basin
# inner = 0.001             # or only: whatever starts in {V <= level} ends in {V <= inner} (dead zone, disturbance)
# search = ["quadratic"]    # what else is derived: quadratic, polynomial, no_return; unasked, as the states afford

[sweep]                     # the simulation
design  = "sobol"           # or "grid"; "rays" (star-shaped basins) and "boundary" (any) need fewer starts
samples = 65536
# goal = { width = 0.002 }  # with "sobol", in place of samples: as many as this width of the interval needs
# accuracy = 1e-3           # with "rays" and "boundary": stop at this error of the share
seed    = 1
horizon = 60.0              # s; by then a trajectory should be decided
longest = 960.0             # s; one that is not is followed up to here
escape  = 10.0              # size of the escape box in domain sizes: a trajectory that leaves it has escaped
store   = "all"             # or "outcomes": outcome and time alone, 9 bytes a start
method  = "auto"
rtol    = 1e-6              # tolerance of one step, relative
atol    = 1e-9              # and absolute, in the units of the states
# ball_radius = 1e-3        # of the target where no level is proved, in half-widths of the domain
# dwell = 10.0              # s that a trajectory must stay there

[verdict]                   # what the release gate asks for
accept     = "proved"       # or "supported"
confidence = 0.99           # of every interval
fraction   = 0.999          # of the claimed set that must converge for "supported"
"""
