"""RODAS, a Rosenbrock method of order 4 with an embedded one of order 3: its coefficients, as data.

Hairer & Wanner, Solving Ordinary Differential Equations II (2nd ed. 1996), section VI.4, in the
transformed variables U that need no product with the Jacobian. With W = I / (gamma h) - J, stage i solves ::

    W U_i = f(y0 + sum_{j<i} A_ij U_j) + sum_{j<i} C_ij U_j / h

and y1 = y0 + sum_j A_6j U_j + U_6, where U_6 is at once the difference to the embedded solution: both
methods are L-stable and stiffly accurate. The tests check the order conditions on these figures.
"""

from __future__ import annotations

import numpy as np

STAGES = 6
ORDER = 4
EMBEDDED_ORDER = 3
GAMMA = 0.25

A = np.array(
    [
        [0.0, 0.0, 0.0, 0.0, 0.0, 0.0],
        [0.1544000000000000e01, 0.0, 0.0, 0.0, 0.0, 0.0],
        [0.9466785280815826e00, 0.2557011698983284e00, 0.0, 0.0, 0.0, 0.0],
        [0.3314825187068521e01, 0.2896124015972201e01, 0.9986419139977817e00, 0.0, 0.0, 0.0],
        [0.1221224509226641e01, 0.6019134481288629e01, 0.1253708332932087e02, -0.6878860361058950e00, 0.0, 0.0],
        [0.1221224509226641e01, 0.6019134481288629e01, 0.1253708332932087e02, -0.6878860361058950e00, 1.0, 0.0],
    ]
)  # fmt: skip

C = np.array(
    [
        [0.0, 0.0, 0.0, 0.0, 0.0],
        [-0.5668800000000000e01, 0.0, 0.0, 0.0, 0.0],
        [-0.2430093356833875e01, -0.2063599157091915e00, 0.0, 0.0, 0.0],
        [-0.1073529058151375e00, -0.9594562251023355e01, -0.2047028614809616e02, 0.0, 0.0],
        [0.7496443313967647e01, -0.1024680431464352e02, -0.3399990352819905e02, 0.1170890893206160e02, 0.0],
        [0.8083246795921522e01, -0.7981132988064893e01, -0.3152159432874371e02, 0.1631930543123136e02,
         -0.6058818238834054e01],
    ]
)  # fmt: skip
