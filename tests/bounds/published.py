"""Published and computed reference values with their sources.

"memory" means: remembered from the source and confirmed by recomputation; "computed" means: no printed value is known.
"""

from __future__ import annotations

NEWCOMBE_1998 = [  # Statistics in Medicine 17:857-872, Table I, Clopper-Pearson at 95% (from third-party quotations)
    (263, 81, 0.2527, 0.3676),
    (148, 15, 0.0578, 0.1617),
    (20, 0, 0.0, 0.1684),
    (29, 1, 0.0009, 0.1776),
]
NIST_7_2_4_1 = (20, 4, 0.10, 0.0713539, 0.4010281)
"""NIST/SEMATECH e-Handbook 7.2.4.1 prints .071354 and .401029 (its root finder's last digit); recomputed as here."""
CONOVER_1971 = (925, 682, 0.05, 0.7076682641, 0.7654065582)
"""R's help page of binom.test, after Conover 1971 p. 97 (Mendel's peas)."""
RULE_OF_THREE = {10: 0.25887, 14: 0.19264, 30: 0.09503, 100: 0.029513, 300: 0.0099361, 1000: 0.00299125}
"""n -> exact one-sided 95% upper limit without errors, near 3/n: Hanley, Lippman-Hand 1983, JAMA 249:1743 (memory)."""
LABELS_FOR_ERRORS = [  # rate, confidence, smallest n that bears it out with 0, 1, 2, ... errors
    (0.05, 0.95, {0: 59, 1: 93, 2: 124, 3: 153, 4: 181, 5: 208}),  # Wilks 1941; Nutt, Wallis 2004; 5 errors computed
    (0.02, 0.95, {0: 149, 1: 236, 2: 313, 5: 523}),  # the same sources
    (0.01, 0.95, {0: 299, 1: 473, 2: 628, 5: 1049}),  # the same sources
    (0.10, 0.95, {0: 29, 1: 46, 2: 61, 3: 76, 4: 89, 5: 103}),  # computed
    (0.10, 0.90, {0: 22, 1: 38, 2: 52, 3: 65, 4: 78, 5: 91}),  # computed
    (0.01, 0.99, {0: 459, 1: 662, 2: 838, 3: 1001, 4: 1157, 5: 1307}),  # computed
]
POISSON_RELIABILITY = {0: 2.9957, 1: 4.7439, 2: 6.2958, 3: 7.7537, 4: 9.1535}
"""AICPA Audit Sampling guide prints 3.00 4.75 6.30 7.76 9.16, rounded up (memory); n*upper limit for many labels."""
LANGFORD_2005 = {  # JMLR 6:273, test-set bound (binomial tail inversion) at risk 0.05: formula from memory, computed
    (100, 0): 0.02951304961,
    (100, 1): 0.04655981145,
    (100, 2): 0.0616192004,
    (100, 5): 0.1022533776,
    (100, 10): 0.1637176233,
    (500, 50): 0.1248658074,
}

CONFSEQ_BERNOULLI = [
    # errors, labels, alpha, t_opt, lower, upper of boundaries.bernoulli_confidence_interval, confseq 0.0.11 (run)
    (0, 100, 0.05, 100, 0.0, 0.03988421553),
    (3, 100, 0.05, 100, 0.0009800728778, 0.1083287341),
    (10, 200, 0.05, 200, 0.01481643325, 0.1092328526),
    (50, 1000, 0.05, 1000, 0.0314986837, 0.07341127811),
    (50, 1000, 0.01, 1000, 0.02883187655, 0.07835102363),
    (50, 1000, 0.05, 10000, 0.02830530878, 0.08210087244),
    (0, 1000, 0.05, 1000, 0.0, 0.0041222031),
    (5, 50, 0.1, 50, 0.01599711906, 0.2507269393),
]
CONFSEQ_BETA_BINOMIAL = [
    # v, alpha, v_opt, g, h, one-sided?, value of boundaries.beta_binomial_mixture_bound, confseq 0.0.11 (run)
    (100, 0.05, 100, 0.1, 0.9, True, 28.68218482),
    (9.5, 0.05, 9.5, 0.05, 0.95, True, 9.62156958),
    (47.5, 0.05, 9.5, 0.05, 0.95, True, 21.09579091),
    (475, 0.05, 47.5, 0.05, 0.95, True, 66.19471125),
    (475, 0.01, 47.5, 0.05, 0.95, True, 78.9093154),
    (250, 0.05, 250, 0.5, 0.5, True, 43.70387202),
    (100, 0.05, 100, 0.1, 0.9, False, 31.82069879),
    (9.5, 0.05, 9.5, 0.05, 0.95, False, 11.01844387),
    (47.5, 0.05, 9.5, 0.05, 0.95, False, 23.77404532),
    (475, 0.05, 47.5, 0.05, 0.95, False, 72.75191267),
    (475, 0.01, 47.5, 0.05, 0.95, False, 84.46029556),
    (250, 0.05, 250, 0.5, 0.5, False, 47.95022293),
]
