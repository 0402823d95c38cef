"""Coefficients of the three-stage Radau IIA method as plain numbers; solve.method checks them against their defining conditions.

T^-1 A^-1 T = [[GAMMA, 0, 0], [0, ALPHA, -BETA], [0, BETA, ALPHA]] with the columns of T scaled so that its last row is (1, 1, 0).
Source: Hairer & Wanner, Solving Ordinary Differential Equations II, 2nd ed. (1996), IV.5 (method), IV.8 (transformation, error estimate);
digits computed from the closed forms with 60 places.
"""

from __future__ import annotations

from typing import Final

C1: Final = 0.15505102572168219018  # (4 - sqrt 6) / 10
C2: Final = 0.64494897427831780982  # (4 + sqrt 6) / 10

GAMMA: Final = 3.63783425274449573221
ALPHA: Final = 2.68108287362775213390
BETA: Final = 3.05043019924741056943

# A^-1
V11: Final = 3.22474487139158904910
V12: Final = 1.16784008469040549492
V13: Final = -0.25319726474218082619
V21: Final = -3.56784008469040549492
V22: Final = 0.77525512860841095090
V23: Final = 1.05319726474218082619
V31: Final = 5.53197264742180826186
V32: Final = -7.53197264742180826186
V33: Final = 5.0

# T; T31 = T32 = 1, T33 = 0
T11: Final = 0.09443876248897524149
T12: Final = -0.14125529502095420843
T13: Final = -0.03002919410514742449
T21: Final = 0.25021312296533331138
T22: Final = 0.20412935229379993200
T23: Final = 0.38294211275726193780

# T^-1
I11: Final = 4.17871859155190472735
I12: Final = 0.32768282076106238708
I13: Final = 0.52337644549944954804
I21: Final = -4.17871859155190472735
I22: Final = -0.32768282076106238708
I23: Final = 0.47662355450055045196
I31: Final = -0.50287263494578687595
I32: Final = 2.57192694985560542919
I33: Final = -0.59603920482822492497

# weights of the stages in the embedded estimate: GAMMA * (x_hat - x_new) before the filter = -F(x_n) + sum E_j (Q_j - q_n) / h
E1: Final = -10.04880939982741556246  # (-13 - 7 sqrt 6) / 3
E2: Final = 1.38214273316074889579  # (-13 + 7 sqrt 6) / 3
E3: Final = -0.33333333333333333333
