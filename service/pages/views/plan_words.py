"""Families, statistics and rules in the words of the people who choose among them."""

FAMILY_WORDS = {
    "bernoulli": "Pass or fail: units that conform or do not",
    "poisson": "Counts over an exposure: defects for an area, events for a time",
    "exponential": "Lives with a constant failure rate",
    "normal": "Measurements: their mean",
    "lognormal": "Positive measurements, normal in their logarithm: their median",
    "negative_binomial": "Counts per unit that vary more than Poisson's",
    "normal_variance": "Measurements: their spread",
    "weibull": "Lives that wear in or wear out, of known shape",
    "paired": "Two ways side by side: pairs that pass or fail",
    "poisson_ratio": "Counts in two arms: the ratio of their rates",
    "normal_difference": "Measurements in two arms, in pairs: the difference",
    "normal_two_sample": "Measurements in two arms, one at a time: the difference",
    "score": "A model of your own: its increments of evidence",
}

# Families that compare two ways of doing one thing.
OF_ARMS = ("paired", "poisson_ratio", "normal_difference", "normal_two_sample")

STATISTIC_WORDS = {
    "simple": "one value against another (Wald)",
    "generalised": "a range against a range, by their best values",
    "mixture": "H0 against all else, averaged over a prior",
    "invariant": "standardised means, whatever the spread is (t)",
}

BOUNDARY_WORDS = {
    "wald": "Wald's approximation",
    "strict": "risks never exceeded, whatever the overshoot",
    "calibrated": "exact risks as stated",
    "given": "thresholds of your own",
    "table": "numbers from a table",
}

KNOWN_WORDS = {
    "sigma": ("Standard deviation σ", "known beforehand"),
    "sigma_a": ("Standard deviation in a", ""),
    "sigma_b": ("Standard deviation in b", ""),
    "dispersion": ("Dispersion k", "the variance is mean + mean²/k"),
    "shape": ("Shape", "above 1 lives wear out, below 1 they wear in"),
    "exposure_ratio": ("Exposure in b for each 1 in a", ""),
    "mean": ("Known mean", "leave empty where it is not known"),
    "reference": ("Reference", "from which the mean is counted; 0 when empty"),
}

# Where a family gives what it knows another sense.
KNOWN_HINTS = {("lognormal", "sigma"): "known beforehand, of the natural logarithm"}

PRIOR_WORDS = {
    "a": "Prior, Beta: a",
    "b": "Prior, Beta: b",
    "shape": "Prior of the rate, gamma: shape",
    "rate": "Prior of the rate, gamma: rate",
    "tau": "Prior, normal about H0: τ",
}


def subject_words(name: str) -> str:
    """What a test of a family is most often of."""
    return "an experiment" if name in OF_ARMS else "a lot"


def family_words(name: str) -> str:
    """What a family observes; its name where nothing is said of it."""
    return FAMILY_WORDS.get(name, name.replace("_", " "))
