"""Rules about the study file."""

from __future__ import annotations

from pipeline.core.rules.rule import Rule

RULES = (
    Rule(
        "unknown_key",
        "Unknown key in the study file",
        "The study file holds a key that no part of the run reads.",
        "A misspelt key would otherwise be ignored and the default used without a word.",
        "Correct the key to the nearest known one, or delete it.",
    ),
    Rule(
        "bad_value",
        "Value of the wrong kind in the study file",
        "A key of the study file holds a value outside what the key allows.",
        "A guess at what was meant could change the numbers.",
        "Write a value of the kind and range stated.",
    ),
    Rule(
        "overlapping_windows",
        "Event window overlaps the estimation window",
        "A window of the study shares sessions with the estimation window.",
        "The normal return would be estimated from days the announcement moved.",
        "End the estimation window earlier, or shorten the window named.",
    ),
    Rule(
        "instrument_is_control",
        "Instrument listed as a control",
        "A variable is both an instrument and a regressor of the outcome.",
        "An instrument must move the outcome through the treatment alone.",
        "Take it out of one of the two lists.",
    ),
    Rule(
        "excluded_is_control",
        "Excluded variable listed as a control",
        "A variable excluded from the outcome stands among its controls.",
        "The exclusion is what identifies the selection model.",
        "Take it out of one of the two lists.",
    ),
    Rule(
        "selection_lacks_control",
        "Company variable missing from the selection equation",
        "A control known for every candidate is not in selection.explained_by.",
        "Leaving it out makes the correction absorb its effect.",
        "Add it to selection.explained_by.",
    ),
    Rule(
        "unknown_variable",
        "Variable that nothing defines",
        "The study names a variable that is neither a column nor a characteristic.",
        "It cannot enter a regression.",
        "Correct its name, or define it under [characteristics].",
    ),
    Rule(
        "outcome_and_returns",
        "Returns asked of a study with an outcome of its own",
        "The study has an [outcome] table and also a key that belongs to returns from prices.",
        "Two outcomes cannot be explained at once, and a key that nothing reads would mislead.",
        "Delete the key named, or delete [outcome] to have returns measured from prices.",
    ),
    Rule(
        "output_folder",
        "Folder that cannot take the run",
        "The folder to write to is a file, holds other things, or cannot be written.",
        "A run replaces its folder whole; it must never replace anything else.",
        "Name a new folder, or one that holds an earlier run.",
    ),
    Rule(
        "no_run",
        "Folder without a finished run",
        "The folder holds no run that can be read back.",
        "Two runs can only be held side by side if both are whole.",
        "Name the folder of a finished run, such as reports/demo.",
    ),
    Rule(
        "different_outcomes",
        "Runs that explain different outcomes",
        "The two runs explain different columns, or the same in units that do not compare.",
        "A difference between two different things has no meaning.",
        "Compare two runs of one outcome.",
    ),
    Rule(
        "treatment_not_binary",
        "Treatment that is not yes or no",
        "The treatment has other values than 0 and 1.",
        "Groups, instruments and words all speak of two values.",
        "Make an indicator under [characteristics], or set regression.continuous = true.",
    ),
    Rule(
        "duplicate_variable",
        "Variable named twice",
        "A variable stands twice among the regressors.",
        "It would repeat itself.",
        "Name it once.",
    ),
)
