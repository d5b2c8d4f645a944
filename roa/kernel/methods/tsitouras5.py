"""Tsitouras 5(4): seven stages, the last shared with the next step.

Source: Ch. Tsitouras, "Runge–Kutta pairs of order 5(4) satisfying only the first column simplifying
assumption", Computers & Mathematics with Applications 62 (2011) 770–775. The tests hold
the coefficients to the row sums and the order conditions.
"""

from roa.kernel.tableau import Tableau

TABLEAU = Tableau(
    name="tsitouras5",
    source="Tsitouras 2011, Comput. Math. Appl. 62, 770-775",
    order=5,
    embedded_orders=(4,),
    c=(0.0, 0.161, 0.327, 0.9, 0.9800255409045097, 1.0, 1.0),
    a=(
        (),
        (0.161,),
        (-0.008480655492356989, 0.335480655492357),
        (2.8971530571054935, -6.359448489975075, 4.3622954328695815),
        (5.325864828439257, -11.748883564062828, 7.4955393428898365, -0.09249506636175525),
        (5.86145544294642, -12.92096931784711, 8.159367898576159, -0.071584973281401, -0.028269050394068383),
        (
            0.09646076681806523,
            0.01,
            0.4798896504144996,
            1.379008574103742,
            -3.290069515436081,
            2.324710524099774,
        ),
    ),
    e=(
        (
            -0.00178001105222577714,
            -0.0008164344596567469,
            0.007880878010261995,
            -0.1447110071732629,
            0.5823571654525552,
            -0.45808210592918697,
            0.015151515151515152,
        ),
    ),
)
