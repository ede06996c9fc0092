"""Numbers of the exponential and the logistic in binary32 and binary64, with the bounds of their errors.

GENERATED: python tests/derive_logistic.py > runtime_min/logistic_constants.py

exp(t) for t <= 0 is 0 below `floor`, else 2^k p(r): k = t * inv_ln2 rounded to an integer, ties to even,
r = (t - k * ln2_high) - k * ln2_low, p by Horner's rule from `coefficients` (c0 first). The logistic is 1 / (1 + e) or
e / (1 + e) with e = exp(-|z|). Each number is the exact value, as the shortest decimal of its binary64.

|p(r) / exp(r) - 1| < 0.065 * 2^-24 and 0.1 * 2^-53 for |r| <= 0.3466; k * ln2_high is exact; the least
exponential above `floor` is a normal number.

binary32: every argument tried (command: pytest tests/test_logistic_constants.py -m slow).
exp: 1.177 ulp at most. The derivation alone gives (1.501, 2.773) ulp for the logistic (z >= 0, z < 0).
binary64: derived for every argument by tests/logistic_bounds.py. exp: 1.253 ulp at most.
"""

BINARY32 = {
    "inv_ln2": 1.4426950216293335,
    "ln2_high": 0.693359375,
    "ln2_low": -0.00021219444170128554,
    "floor": -87.0,
    "coefficients": (
        1.0,
        1.0,
        0.4999999403953552,
        0.1666652113199234,
        0.04166838899254799,
        0.008368714712560177,
        0.001381455920636654,
    ),
}

BINARY64 = {
    "inv_ln2": 1.4426950408889634,
    "ln2_high": 0.6931471805598903,
    "ln2_low": 5.497923018708371e-14,
    "floor": -708.0,
    "coefficients": (
        1.0,
        1.0,
        0.5000000000000011,
        0.16666666666666413,
        0.04166666666653026,
        0.008333333333494371,
        0.0013888888943599422,
        0.0001984126950667297,
        2.4801493134194417e-05,
        2.7557586378071743e-06,
        2.7630234664536525e-07,
        2.5000033048168328e-08,
    ),
}

# |device probability - logistic(z)| / ulp, (z >= 0, z < 0), floor <= -|z|; an ulp is the distance between neighbours
# in the binade of the larger of the two.
BINARY32_PROBABILITY_ULPS = (1.499, 2.402)
BINARY64_PROBABILITY_ULPS = (1.501, 2.754)

# |device probability - logistic(z)| <= this for every z but NaN, those beyond the floor included.
BINARY32_PROBABILITY_ERROR = 8.931e-08
BINARY64_PROBABILITY_ERROR = 1.666e-16
