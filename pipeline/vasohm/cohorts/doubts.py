"""What is doubtful about a comparison: codes as they stand in its table, and what they tell the reader."""

from collections.abc import Mapping

FEW_SUBJECTS = "few_subjects"
TOO_FEW_SUBJECTS = "too_few_subjects"
NO_SCATTER = "no_scatter"
FEW_PERMUTATIONS = "few_permutations"
UNPAIRED_SUBJECTS = "unpaired_subjects"
TWO_CALIBRATIONS = "two_calibrations"
UNEQUAL_LOSS = "unequal_loss"
NOT_POSITIVE = "not_positive"
COVARIATE_CONSTANT = "covariate_constant"
VALUES_MISSING = "values_missing"
COVARIATE_COLLINEAR = "covariate_collinear"

MEANING: Mapping[str, str] = {
    FEW_SUBJECTS: "fewer than six subjects on a side: too few to show whether their scatter is what the interval takes "
    "it for",
    TOO_FEW_SUBJECTS: "too few subjects have a value: nothing can be said",
    NO_SCATTER: "the subjects do not differ at all: no interval can be told",
    FEW_PERMUTATIONS: "so few subjects can be rearranged in so few ways that the permutation test cannot come below "
    "0.05",
    UNPAIRED_SUBJECTS: "subjects that were seen in one of the two states only",
    TWO_CALIBRATIONS: "the two sides were measured at pixel sizes of different origin: what these do not share is in "
    "the interval and in p, and the permutation test does not know of it",
    UNEQUAL_LOSS: "images gave no value more often on one side than on the other (Fisher's exact test, p < 0.05): what "
    "is left may not stand for what there was",
    NOT_POSITIVE: "values of zero or below: compared as they are and not as logarithms, so that there is no ratio",
    COVARIATE_CONSTANT: "a covariate does not change within any subject: it cancels in differences and was left out",
    VALUES_MISSING: "measured images gave no value of this outcome, or lack a covariate",
    COVARIATE_COLLINEAR: "among the subjects with a value a covariate tells the same as the levels: nothing can be "
    "said",
}


def joined(codes: set[str]) -> str:
    """Write codes as a cell, in the order in which they are explained."""
    return ";".join(code for code in MEANING if code in codes)
