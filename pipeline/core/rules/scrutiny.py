"""Rules about the doubts a study asks to be gone through."""

from __future__ import annotations

from pipeline.core.rules.rule import Rule

RULES = (
    Rule(
        "benchmark_not_control",
        "Benchmark that is not a control",
        "A hidden confounder is to be likened to a variable that is not a varying control.",
        "Only what the regression holds fixed has a known strength.",
        'scrutiny.benchmarks = ["industry"], which is a fixed effect.',
        "Name a control, or add the variable to the controls.",
    ),
    Rule(
        "violation_range",
        "Range of violations without an order",
        "The direct effects allowed to the instruments have a lower end above the upper one, too "
        "few ends, or too many combinations.",
        "The union of intervals runs over every value between the ends.",
        "A direct effect from 0.2 to 0.1.",
        "Give a lower and an upper end for each instrument.",
    ),
    Rule(
        "reliability_variable",
        "Reliability of something that is not a regressor",
        "A reliability is given for a variable the column does not hold.",
        "There is no coefficient to correct.",
        "reliability = { profit = 0.8 }, and profit is no control.",
        "Name a regressor of the study.",
    ),
    Rule(
        "reliability_range",
        "Reliability out of range",
        "A reliability is not above 0 and at most 1.",
        "It is the share of the recorded variance that is true.",
        "reliability = { leverage = 1.2 }.",
        "Give a share, for example the correlation of two independent records.",
    ),
    Rule(
        "reliability_too_low",
        "Reliability that leaves nothing",
        "With the errors taken out the regressors would vary less than not at all.",
        "A variable that the others predict this well cannot be recorded this badly.",
        "reliability = { leverage = 0.1 }, where the other controls tell 95% of leverage.",
        "Raise the reliability above the R² of the variable on the other regressors.",
    ),
    Rule(
        "misclassification_range",
        "Misclassification beyond what was recorded",
        "The rates given would classify more deals wrongly than there are, or leave no choice.",
        "The true shares follow from the recorded ones and the rates.",
        "misclassified = [[0.6, 0.5]].",
        "Give smaller rates.",
    ),
    Rule(
        "grid_too_large",
        "Grid of too many cells",
        "The declared choices combine to more cells than allowed without asking.",
        "A grid this large takes long and is read by nobody.",
        "Six control sets, four windows, five samples and twenty estimators.",
        "Declare fewer choices, raise scrutiny.grid.most_cells, or set scrutiny.grid.allow = true.",
    ),
    Rule(
        "grid_control",
        "Control of the grid that is not in the study",
        "A set of controls names a variable that is not among the study's controls.",
        "All cells stand on the variables the study prepared.",
        'control_sets = [["leverage", "weight"]].',
        "Add it to the controls, or take it out of the grid.",
    ),
    Rule(
        "grid_sample",
        "Sample of the grid that is none",
        "A sample declared for the grid keeps every deal or none.",
        "It would repeat a choice that is there already, or leave nothing to estimate.",
        'samples = { large = { column = "market_value", above = 0 } }, which keeps every deal.',
        "Change the condition, or take the sample out of the grid.",
    ),
    Rule(
        "reverse_instrument",
        "Reverse equation without something that moves the return alone",
        "A variable named for the equation of the choice is not a varying control.",
        "What the return does to the choice can only be told by something that moves the return "
        "and not the choice, and what the choice does to the return only by instruments.",
        'reverse = ["industry"].',
        "Name controls of the study, and declare instruments.",
    ),
    Rule(
        "reliability_of_choice",
        "Reliability of a feature that is 0 or 1",
        "A reliability is given for the feature asked about, which has two values.",
        "The error of such a record moves against the truth, which no reliability describes.",
        "reliability = { paid_in_shares = 0.9 }; use scrutiny.misclassified.",
        "Give the rates of misclassification in its place.",
    ),
    Rule(
        "winsorise_range",
        "Winsorising out of range",
        "The share of each tail is not between 0 and a quarter.",
        "Beyond it the middle of the sample is what is made up.",
        "winsorise = [0.4].",
        "Give a share from 0 to .25.",
    ),
    Rule(
        "probability_range",
        "Probability out of range",
        "What investors expected is not a chance from 0 to below 1, or the completion is not above "
        "0 and at most 1.",
        "News that was certain moves no price, so nothing could be learned from it.",
        "known_before = [1.0].",
        "Give probabilities.",
    ),
    Rule(
        "suspect_sign",
        "Sign that is none",
        "A suspected factor has a sign other than + - 0 or ?.",
        "The direction of the bias is the product of two signs.",
        'on_outcome = "plus"; write "+".',
        "Give one of + - 0 ?, as a text.",
    ),
)
