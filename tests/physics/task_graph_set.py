"""Two graphs of the Standard Task Graph Set (Kasahara laboratory, Waseda University): published data.

``RANDOM`` is 50/rand0000.stg, ``ROBOT`` the application graph robot.stg. A line is: task, processing time, its
predecessors; the dummy first and last task are left out. The headers state critical paths of 55 and 569.
"""

from __future__ import annotations

from breakstep.forecast.graph import ReplayGraph, build_graph

RANDOM = """
1 9
2 4
3 3
4 6
5 4 1
6 3 5
7 3
8 8 6
9 9
10 2 2 6 8
11 1 9
12 10
13 10 6
14 3
15 1
16 9
17 4 8 10
18 2 6
19 6 13
20 8 10 12 14 16 19
21 1 7 15
22 10 13
23 2 1 11
24 6 7
25 3 14
26 2 5 12
27 8 12 13
28 4 6 8 13 14
29 5 7
30 4 6 11 15 26
31 6 27
32 9 14
33 6 23
34 1 4 16 22
35 9
36 7 20 24
37 1 10 18
38 1 21 30 36
39 7 7 27 28 32 37
40 5 2 4 7 14
41 2 6 15 26 35 37
42 5 1 6
43 9 10 15 22 30
44 6
45 6 24 27 37
46 5 2 7 15 23 25 41
47 6 15 16 20 33 44
48 2 23 28 29 40 41
49 9 30 39 46 47
50 10 20 32 46
"""

ROBOT = """
1 1
2 1
3 5 1
4 5 1
5 10 1
6 28 1 4
7 5 1
8 10 1
9 1 5 6
10 57 5
11 66 5
12 38 5
13 15 6
14 24 6
15 10 6
16 15 2 7 8
17 10 2
18 10 9
19 24 12 15 17
20 40 9 18
21 32 9
22 57 9
23 15 9
24 10 9
25 38 9
26 53 9
27 10 9
28 12 10 13
29 39 11 14 19
30 4 19
31 24 26 27 30
32 24 20
33 15 20
34 10 21
35 32 21
36 57 21
37 66 21
38 12 22 23
39 39 24 25 31
40 28 31
41 40 20 34
42 12 33 36
43 10 35
44 57 35
45 32 35
46 66 35
47 15 41
48 24 41
49 39 32 37
50 28 40
51 40 41 43
52 12 44 47
53 111 45
54 84 45
55 38 45
56 39 46 48 50
57 28 50
58 69 51
59 42 51
60 10 51
61 24 55 57 60
62 12 53 58
63 39 54 59 61
64 42 63
65 12 62 64
66 28 65
67 24 56
68 40 56
69 24 52 66 67
70 24 49
71 28 69
72 40 49 68
73 40 39 72
74 38 72
75 24 42 70 71
76 36 74 75
77 10 39
78 24 38 76 77
79 10 73
80 12 29 73
81 40 16 80
82 24 29
83 8 78 79
84 24 28 82 83
85 24 80
86 36 84 85
87 24 16
88 24 3 86 87
"""


def parsed(text: str) -> ReplayGraph:
    """The graph, tasks numbered from 0."""
    rows = [[int(word) for word in line.split()] for line in text.strip().splitlines()]
    edges = [(before - 1, row[0] - 1) for row in rows for before in row[2:] if before > 0]
    return build_graph([row[1] for row in rows], [edge[0] for edge in edges], [edge[1] for edge in edges])
