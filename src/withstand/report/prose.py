"""What every report says in the same words."""

CAUTION = (
    "People may act on intervals and tests: a wrong one can harm those who rely on the product, the building, the "
    "treatment or the water. This report says how a calculation behaves under stated departures; it does not say that a "
    "design is safe. The codes and standards that apply where you work, and the judgement of people licensed or qualified "
    "in the field, come before anything here."
)

READING = (
    "Coverage is the share of intervals that hold the true value; a 95 % interval should do so in 95 of 100 repetitions of the "
    "study. Size is the share of tests that reject a true null hypothesis; 5 % is what is promised.",
    "A departure is one way the assumptions fail; its severity says how far. 'Holds' means that the judged measures stay "
    "within the stated tolerance, 'gives' that one is outside, 'unsettled' that the simulation reached its cap before it "
    "was clear.",
    "'Your data allow' is the range of severities under which residuals like yours would not be surprising (test inversion, "
    "central 90 % by default). A departure that gives only beyond that range is less pressing than one that gives within it.",
    "Numbers without ± are exact, by numerical integration and not by simulation. ± is the half-width of the 95 % Monte Carlo "
    "interval of the simulated ones.",
    "Premium is what a procedure costs when nothing is wrong, protection what it saves when something is (Anscombe 1960).",
)

LIMITS = (
    "Only the departures listed were tried, one at a time unless a stack is named. Real data may depart in ways that are "
    "not here.",
    "It does not say which departure is there. Residuals that look harmless are weak evidence in a small study, and the "
    "allowed range of one departure is worked out as if it were the only one.",
    "It judges the stated model and focus. It cannot find a variable that was left out, a biased sample, a measurement "
    "that means something else, or a cause.",
    "With fixed rows the conclusions hold for these rows; another sample of rows may behave differently.",
    "Choosing a procedure after looking at many of them is itself a choice that the numbers do not account for.",
)

FIGURE_TITLES = {
    "coverage": "Coverage against severity",
    "size": "Size against severity",
    "premium": "Premium and protection",
    "harm": "Harm and how easily it is noticed",
}

FIGURE_NOTES = {
    "coverage": (
        "One panel a departure, the most worrying first; severities are evenly spaced. The scale is stretched near 100 %, "
        "and values beyond 0.5 and 99.5 % are drawn there. Every number is in the verdict table."
    ),
    "size": (
        "One panel a departure, the most worrying first; severities are evenly spaced. The scale is stretched near 0 %, "
        "and values beyond 0.5 and 99.5 % are drawn there."
    ),
    "premium": (
        "Left, what each procedure costs when nothing is wrong; right, its coverage under each departure at the worst "
        "severity tried that the data allow (the last tried, where the data do not say). Where a procedure gave no answer in "
        "some replicates, the largest share of them in any world is written under its worst departure."
    ),
    "harm": (
        "Coverage lost at the worst severity the data allow, against the chance that the usual 5 % check of the residuals "
        "notices the departure where the interval starts to give. High on the left is what to fear: harmful and hard to "
        "see."
    ),
}
