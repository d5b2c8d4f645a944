"""Bogacki–Shampine 3(2): four stages, the last shared with the next step.

Source: P. Bogacki, L. F. Shampine, "A 3(2) pair of Runge–Kutta formulas", Applied Mathematics
Letters 2 (1989) 321–325. The tests hold the coefficients to the row sums and the order conditions.
"""

from roa.kernel.tableau import Tableau

TABLEAU = Tableau(
    name="bogacki_shampine3",
    source="Bogacki and Shampine 1989, Appl. Math. Lett. 2, 321-325",
    order=3,
    embedded_orders=(2,),
    c=(0.0, 1 / 2, 3 / 4, 1.0),
    a=(
        (),
        (1 / 2,),
        (0.0, 3 / 4),
        (2 / 9, 1 / 3, 4 / 9),
    ),
    e=((-5 / 72, 1 / 12, 1 / 9, -1 / 8),),
)
