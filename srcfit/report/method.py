"""How the answer was found, in words, with the published sources."""

from __future__ import annotations

from srcfit.report.html import safe

STEPS = (
    (
        "From source to reading",
        "The member's Green's kernel G(x, s) is the response at x to a unit source at s, with the "
        "ends, supports and coefficients of the case. A reading is then the sum over all cells of "
        "the source times its influence line, plus nuisances such as a datum offset, plus noise. "
        "The readings are divided by their standard deviation, so that each counts by what it is "
        "worth.",
    ),
    (
        "From reading to source",
        "Taking derivatives of the readings would only amplify their noise. Instead the source is "
        "sought that meets the readings and is not rougher than it must be: the sum of squared "
        "standardised residuals plus the strength times a roughness is made smallest [1]. Totals, "
        "offsets and lumped parts carry no penalty.",
    ),
    (
        "How strong",
        "Every strength of a ladder is tried. The criteria are the L-curve's corner [2], "
        "generalised [3] and robust generalised cross-validation [4], leave-one-out and grouped "
        "k-fold cross-validation, the discrepancy principle [5], the unbiased risk [6] and the "
        "restricted likelihood, called evidence [7]. Averaged means that no single strength is "
        "picked: the estimates of all strengths, and of several families of roughness, are "
        "averaged with weights in proportion to their evidence.",
    ),
    (
        "The cautious band",
        "An estimate that smooths is biased where the source is rough, and its formal spread does "
        "not say so [8, 9]. The interval is therefore taken from a cautious prior: as if the "
        "source might vary by at least half its own mean within a tenth of the member, and jump "
        "at the edges that were drawn, whether or not they are exact. The distance between the "
        "estimate and the cautious estimates is added to it in quadrature, and so are the stated "
        "uncertainties of the member's properties.",
    ),
    (
        "The calibrated band",
        "The cautious band keeps its promise with room to spare; how much depends on the layout. "
        "Where the calibrated band is asked for, the whole procedure is repeated on simulated "
        "readings of some hundred reference sources at these very sensors [10, 11], and the "
        "half-width of each answer is set so that it would have failed for one or two in a "
        "hundred of them besides what the noise does. The reference sources are the same for "
        "everyone: floors, blocks, tents, bumps, wedges and waves, with edges where edges were "
        "drawn and elsewhere. For sources unlike all of these, such as one hot joint ten times "
        "its surroundings, it fails more often; the cautious band does not.",
    ),
    (
        "Share of the data",
        "One minus the variance that is left over the variance that the prior alone would give. "
        "Near 100 % the readings speak; near 0 % the answer is the prior's. Either way the source "
        "is taken to be smooth between the readings; what they allow without that stands among "
        "the numbers.",
    ),
    (
        "Numbers",
        "Uncertainties are printed with two significant digits, values to the same place [12]. "
        "Value ± number gives one standard uncertainty; intervals state their level.",
    ),
)

SOURCES = (
    "A. N. Tikhonov, Solution of incorrectly formulated problems and the regularization method, "
    "Soviet Mathematics Doklady 4 (1963) 1035–1038.",
    "P. C. Hansen, Analysis of discrete ill-posed problems by means of the L-curve, SIAM Review "
    "34 (1992) 561–580.",
    "G. H. Golub, M. Heath, G. Wahba, Generalized cross-validation as a method for choosing a "
    "good ridge parameter, Technometrics 21 (1979) 215–223.",
    "M. A. Lukas, Robust generalized cross-validation for choosing the regularization parameter, "
    "Inverse Problems 22 (2006) 1883–1902.",
    "V. A. Morozov, On the solution of functional equations by the method of regularization, "
    "Soviet Mathematics Doklady 7 (1966) 414–417.",
    "C. L. Mallows, Some comments on C_p, Technometrics 15 (1973) 661–675.",
    "H. D. Patterson, R. Thompson, Recovery of inter-block information when block sizes are "
    "unequal, Biometrika 58 (1971) 545–554.",
    "G. Wahba, Bayesian “confidence intervals” for the cross-validated smoothing spline, Journal "
    "of the Royal Statistical Society B 45 (1983) 133–150.",
    "D. Nychka, Bayesian confidence intervals for smoothing splines, Journal of the American "
    "Statistical Association 83 (1988) 1134–1143.",
    "D. B. Rubin, Bayesianly justifiable and relevant frequency calculations for the applied "
    "statistician, Annals of Statistics 12 (1984) 1151–1172.",
    "V. Vovk, A. Gammerman, G. Shafer, Algorithmic Learning in a Random World, Springer (2005).",
    "JCGM 100:2008, Guide to the expression of uncertainty in measurement, 7.2.6.",
)

# beside those of each member kind
CAUTIONS = (
    "Local codes and licensed practice come first.",
    "The numbers hold for the member as it was described; a wrong end condition or coefficient "
    "changes them without widening any interval, unless its uncertainty is stated.",
)


def method_text() -> str:
    """Steps as headed paragraphs, then the numbered sources."""
    steps = "".join(f"<h3>{safe(head)}</h3><p>{safe(text)}</p>" for head, text in STEPS)
    sources = "".join(f"<li>{safe(text)}</li>" for text in SOURCES)
    return f'{steps}<h3>Sources</h3><ol class="sources">{sources}</ol>'
