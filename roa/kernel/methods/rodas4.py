"""RODAS4: a Rosenbrock method of order 4(3) for stiff loops, stiffly accurate, six stages, L-stable.

Source: E. Hairer, G. Wanner, Solving Ordinary Differential Equations II, 2nd ed. 1996, IV.7 (the code RODAS, from
memory); the tests hold the coefficients to the order conditions, the order slope and the stability at infinity.
"""

from roa.kernel.tableau import RosenbrockTableau

_LAST = (1.221224509226641, 6.019134481288629, 12.53708332932087, -0.687886036105895)

TABLEAU = RosenbrockTableau(
    name="rodas4",
    source="Hairer, Wanner 1996, Solving Ordinary Differential Equations II, IV.7",
    order=4,
    embedded_orders=(3,),
    gamma=0.25,
    a=(
        (),
        (1.544,),
        (0.9466785280815826, 0.2557011698983284),
        (3.314825187068521, 2.896124015972201, 0.9986419139977817),
        _LAST,
        (*_LAST, 1.0),
    ),
    c=(
        (),
        (-5.6688,),
        (-2.430093356833875, -0.2063599157091915),
        (-0.1073529058151375, -9.594562251023355, -20.47028614809616),
        (7.496443313967647, -10.24680431464352, -33.99990352819905, 11.7089089320616),
        (8.083246795921522, -7.981132988064893, -31.52159432874371, 16.31930543123136, -6.058818238834054),
    ),
    m=(*_LAST, 1.0, 1.0),
    e=(0.0, 0.0, 0.0, 0.0, 0.0, 1.0),
)
