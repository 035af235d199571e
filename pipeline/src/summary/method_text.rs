//! How the figures of a run were made: settings, methods in a few sentences, references.

use super::text::{sentence_markdown, table_head, table_row};
use crate::settings::Analysis;

/// Every setting with the value used.
pub(super) fn settings_section(settings: &Analysis) -> String {
    let mut text = String::from(
        "## Settings used\n\nKeys of `[analysis]` in recording.toml; each is also a flag of the command line.\n\n",
    );
    text.push_str(&table_head(&[("setting", false), ("value", false)]));
    if let Ok(serde_json::Value::Object(entries)) = serde_json::to_value(settings) {
        for (key, value) in entries {
            let shown = match value {
                serde_json::Value::Array(items) => items
                    .iter()
                    .map(|item| item.as_str().map_or_else(|| item.to_string(), str::to_string))
                    .collect::<Vec<_>>()
                    .join(", "),
                serde_json::Value::String(text) => text,
                other => other.to_string(),
            };
            text.push_str(&table_row(&[format!("`{key}`"), sentence_markdown(&shown)]));
        }
    }
    text.push('\n');
    text
}

/// The methods in a few sentences.
pub(super) fn methods_section(settings: &Analysis) -> String {
    // Rounded so that 0.07 is not 7.000000000000001 %.
    let percent = |fraction: f64| format!("{} %", (1e6 * fraction).round() / 1e4);
    let intervals = if settings.profiles {
        "Intervals are 95 % profile likelihood intervals: all values of a parameter that, with the others fitted anew, \
         raise the deviance by no more than F(0.95; 1, steps - 4) (Bates & Watts 1988; Venzon & Moolgavkar 1988). They \
         may be lopsided, and one that never closes has no bound on that side."
    } else {
        "Profile intervals were switched off for this run (`profiles = false`): only standard errors are given, and \
         the verdict `open` rests on the fit of the smoothed ramp alone."
    };
    format!(
        "## How these numbers are made\n\n\
         **Rates.** The rate of a step is the reciprocal of its mean interspike interval, (n - 1)/(last spike - first \
         spike); a step with one spike counts as one spike per window, a step without any as 0 Hz. Responses: `whole` \
         is the whole step, `steady` its last {steady}, `onset` its first interval. Interval statistics in \
         steps.parquet: CV, CV2 (Holt et al. 1996), LV (Shinomoto et al. 2003) and LvR (Shinomoto et al. 2009, \
         refractoriness constant {refractory} s).\n\n\
         **Standard errors and weights.** The standard error of a rate is rate x CV/sqrt(n - 1) with the cell's \
         interval CV, the median over its steps with five intervals or more of the CV without its linear trend over \
         time (over those with three or more where there are none; 1 where there are none of these either), and at \
         least sqrt(0.05/12)/T for a window of length T; with one spike or none it is 1/(sqrt(12) T). In the fit a \
         step with one spike or none has an SD of half a count, 1/(2 T); to the squared standard error of the others \
         1/(12 T^2), the resolution of one count, is added, because recorded rates scatter more there than interval \
         noise alone. A between-step variance (`extra_sd`, the square root of it) is added to every step so that the \
         weighted squared residuals equal the degrees of freedom (the estimator of Paule & Mandel 1982); the weight \
         of a step is the reciprocal of the sum.\n\n\
         **Rate function.** rate = max rate x E\\[H(u)\\], H(u) = u/(1 + u) above threshold and 0 below, u = (drive - \
         threshold)/half-rise: a rectangular hyperbola (Michaelis & Menten 1913; in sensory physiology Naka & Rushton \
         1966) with Gaussian input noise of SD `noise_sd` averaged in. Initial gain is max rate/half-rise. Half-rise \
         is counted from the threshold. Rate functions are compared by AICc (Hurvich & Tsai 1989) in \
         goodness.parquet.\n\n\
         **Intervals.** {intervals} The band of the curve is by the delta method. A fit that did not \
         converge gives no numbers.\n\n\
         **Verdicts on the ceiling.** `silent`: fewer than {silent} steps with a rate from intervals. `declining`: \
         above the peak the mean rate falls below {fraction} of it by more than {se} standard errors on two levels or \
         more, or below {last} of it on the last level; the steps above the peak are left out and the rest is \
         fitted. `open`: max rate has no upper bound, the data do not tell the curve from a smoothed ramp. `loose`: \
         closed, but the upper bound is more than {ratio} times the lower. `resolved`: otherwise. A cell is usable \
         when it is fitted, `resolved` or `loose`, and no flag rejects it.\n\n",
        steady = percent(settings.steady_fraction),
        refractory = settings.lvr_refractory_s,
        silent = settings.min_interval_steps,
        fraction = percent(settings.declining_fraction),
        se = settings.declining_se,
        last = percent(settings.declining_last_fraction),
        ratio = settings.loose_ratio,
    )
}

/// The published sources of the methods.
pub(super) const REFERENCES: &str = "\
## References

- Bates DM, Watts DG (1988). *Nonlinear Regression Analysis and Its Applications*. Wiley, New York. Chapter 6.
- Holt GR, Softky WR, Koch C, Douglas RJ (1996). Comparison of discharge variability in vitro and in vivo in cat visual cortex neurons. *Journal of Neurophysiology* 75, 1806-1814.
- Hurvich CM, Tsai CL (1989). Regression and time series model selection in small samples. *Biometrika* 76, 297-307.
- Hyndman RJ, Fan Y (1996). Sample quantiles in statistical packages. *The American Statistician* 50, 361-365.
- Michaelis L, Menten ML (1913). Die Kinetik der Invertinwirkung. *Biochemische Zeitschrift* 49, 333-369.
- Naka KI, Rushton WAH (1966). S-potentials from luminosity units in the retina of fish (Cyprinidae). *Journal of Physiology* 185, 587-599.
- Okabe M, Ito K (2008). Color universal design: how to make figures and presentations that are friendly to colorblind people. The colours of the figures.
- Paule RC, Mandel J (1982). Consensus values and weighting factors. *Journal of Research of the National Bureau of Standards* 87, 377-385.
- Shinomoto S, Shima K, Tanji J (2003). Differences in spiking patterns among cortical neurons. *Neural Computation* 15, 2823-2842.
- Shinomoto S, Kim H, Shimokawa T, et al. (2009). Relating neuronal firing patterns to functional differentiation of cerebral cortex. *PLoS Computational Biology* 5, e1000433.
- Tukey JW (1977). *Exploratory Data Analysis*. Addison-Wesley, Reading. Chapter 2. The far-out values of the distributions.
- Venzon DJ, Moolgavkar SH (1988). A method for computing profile-likelihood-based confidence intervals. *Applied Statistics* 37, 87-94.
";
