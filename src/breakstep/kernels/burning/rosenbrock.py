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
        [1.544, 0.0, 0.0, 0.0, 0.0, 0.0],
        [0.9466785280815826, 0.2557011698983284, 0.0, 0.0, 0.0, 0.0],
        [3.314825187068521, 2.896124015972201, 0.9986419139977817, 0.0, 0.0, 0.0],
        [1.221224509226641, 6.019134481288629, 12.53708332932087, -0.687886036105895, 0.0, 0.0],
        [1.221224509226641, 6.019134481288629, 12.53708332932087, -0.687886036105895, 1.0, 0.0],
    ]
)

C = np.array(
    [
        [0.0, 0.0, 0.0, 0.0, 0.0],
        [-5.6688, 0.0, 0.0, 0.0, 0.0],
        [-2.430093356833875, -0.2063599157091915, 0.0, 0.0, 0.0],
        [-0.1073529058151375, -9.594562251023355, -20.47028614809616, 0.0, 0.0],
        [7.496443313967647, -10.24680431464352, -33.99990352819905, 11.7089089320616, 0.0],
        [8.083246795921522, -7.981132988064893, -31.52159432874371, 16.31930543123136, -6.058818238834054],
    ]
)
