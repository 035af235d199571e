//! What can be typed.

use std::num::NonZeroUsize;
use std::path::PathBuf;

use clap::{Args, Parser, Subcommand, ValueEnum};
use halfrise::curve::Curve;
use halfrise::fit::BootstrapKind;
use halfrise::rates::Response;
use halfrise::settings::{Analysis, CellFigures};

/// Turns recordings of many neurons under stepped input into rate functions, with intervals and a verdict on each
/// cell's ceiling.
#[derive(Debug, Parser)]
#[command(version, propagate_version = true)]
pub struct Arguments {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// The commands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Read and validate a recording set; say what would be refused and why; write nothing
    Check(CommonArguments),
    /// Stop after the rates: steps.parquet and refused.parquet
    Rates(WorkArguments),
    /// The whole job: rates, fits, intervals, verdicts, tables, summary and figures
    Fit(FitArguments),
}

impl Command {
    /// The arguments that every command has.
    pub fn common(&self) -> &CommonArguments {
        match self {
            Self::Check(common) => common,
            Self::Rates(work) => &work.common,
            Self::Fit(fit) => &fit.work.common,
        }
    }
}

/// Arguments of every command.
#[derive(Debug, Args)]
pub struct CommonArguments {
    /// Folder of the recording set: spikes, protocol, and optionally cells and recording.toml
    pub set: PathBuf,
    /// Worker threads [default: one per core]
    #[arg(long, value_name = "N")]
    pub threads: Option<NonZeroUsize>,
    /// No progress and no closing summary; errors are still told
    #[arg(long, short)]
    pub quiet: bool,
    /// End with exit code 3 if a row is refused or a cell cannot be fitted
    #[arg(long)]
    pub strict: bool,
    /// Print the closing summary as one JSON object on standard output
    #[arg(long)]
    pub json: bool,
}

/// Arguments of the commands that write.
#[derive(Debug, Args)]
pub struct WorkArguments {
    /// What every command takes.
    #[command(flatten)]
    pub common: CommonArguments,
    /// Result folder [default: reports/<name of the set's folder>]
    #[arg(long, value_name = "DIR")]
    pub out: Option<PathBuf>,
    /// Replace an existing result folder
    #[arg(long)]
    pub overwrite: bool,
    /// Analysis settings.
    #[command(flatten)]
    pub settings: SettingArguments,
}

/// Arguments of `fit`.
#[derive(Debug, Args)]
pub struct FitArguments {
    /// What `rates` takes as well.
    #[command(flatten)]
    pub work: WorkArguments,
}

/// A response as typed.
#[derive(Clone, Copy, Debug, ValueEnum)]
pub enum ResponseName {
    /// The whole step
    Whole,
    /// Its last part
    Steady,
    /// The first interval
    Onset,
}

/// Which cells get a figure, as typed.
#[derive(Clone, Copy, Debug, ValueEnum)]
pub enum FiguresName {
    /// Every cell with steps
    All,
    /// Cells with a flag of severity caution or reject, or with a response without a usable fit
    Flagged,
    /// No figures, not even of the set
    None,
}

/// What a resample is drawn from, as typed.
#[derive(Clone, Copy, Debug, ValueEnum)]
pub enum BootstrapName {
    /// The fitted curve and the scatter about it
    Parametric,
    /// The steps recorded at the same level
    Cases,
}

fn curve_named(name: &str) -> Result<Curve, String> {
    Curve::from_name(name).ok_or_else(|| {
        let known: Vec<&str> = Curve::ALL.iter().map(|curve| curve.name()).collect();
        format!("known rate functions: {}", known.join(", "))
    })
}

/// One flag for every key of `[analysis]`.
#[derive(Debug, Default, Args)]
#[command(next_help_heading = "Analysis settings (also keys of [analysis] in recording.toml)")]
pub struct SettingArguments {
    /// Responses to analyse, comma separated [default: whole,steady,onset]
    #[arg(long, value_enum, value_delimiter = ',', value_name = "LIST")]
    pub responses: Option<Vec<ResponseName>>,
    /// Last part of a step that counts as steady, as a fraction [default: 0.5]
    #[arg(long, value_name = "X")]
    pub steady_fraction: Option<f64>,
    /// Refractoriness constant of LvR in seconds [default: 0.005]
    #[arg(long, value_name = "S")]
    pub lvr_refractory_s: Option<f64>,
    /// Leave out the profile intervals
    #[arg(long)]
    pub no_profiles: bool,
    /// Cells that get a figure of their own [default: all]
    #[arg(long, value_enum, value_name = "WHICH")]
    pub figures: Option<FiguresName>,
    /// Draw no figures: the same as --figures none
    #[arg(long, conflicts_with = "figures")]
    pub no_figures: bool,
    /// Draw the other rate functions into the figure of each cell
    #[arg(long)]
    pub draw_rivals: bool,
    /// Steps with a rate from intervals below which a response is silent [default: 3]
    #[arg(long, value_name = "N")]
    pub min_interval_steps: Option<usize>,
    /// Upper over lower bound of max rate above which a ceiling is loose [default: 1.5]
    #[arg(long, value_name = "X")]
    pub loose_ratio: Option<f64>,
    /// Fraction of the peak below which rates above the peak level count as fallen [default: 0.85]
    #[arg(long, value_name = "X")]
    pub declining_fraction: Option<f64>,
    /// Standard errors by which they must have fallen, on two levels [default: 3]
    #[arg(long, value_name = "X")]
    pub declining_se: Option<f64>,
    /// Fraction of the peak below which the last level alone shows a decline [default: 0.5]
    #[arg(long, value_name = "X")]
    pub declining_last_fraction: Option<f64>,
    /// Levels below which a cell is flagged few-levels [default: 6]
    #[arg(long, value_name = "N")]
    pub few_levels: Option<usize>,
    /// Spikes below which a response is flagged few-spikes [default: 5]
    #[arg(long, value_name = "N")]
    pub few_spikes: Option<usize>,
    /// Interval in seconds below which short-interval is flagged [default: 0.001]
    #[arg(long, value_name = "S")]
    pub short_interval_s: Option<f64>,
    /// Fraction of spikes outside steps above which spikes-outside is flagged [default: 0.2]
    #[arg(long, value_name = "X")]
    pub outside_fraction: Option<f64>,
    /// Last over first rate in a step below which strong-adaptation is flagged [default: 0.5]
    #[arg(long, value_name = "X")]
    pub adaptation_fraction: Option<f64>,
    /// Interval CV above which irregular is flagged [default: 1]
    #[arg(long, value_name = "X")]
    pub irregular_cv: Option<f64>,
    /// Mean intervals of silence at the end of a step above which stops-early is flagged [default: 5]
    #[arg(long, value_name = "X")]
    pub stop_intervals: Option<f64>,
    /// Change of the rate over the repeats, as a fraction, above which drift is flagged [default: 0.1]
    #[arg(long, value_name = "X")]
    pub drift_fraction: Option<f64>,
    /// p of no drift below which it is believed [default: 0.01]
    #[arg(long, value_name = "P")]
    pub drift_p: Option<f64>,
    /// Lack-of-fit p below which lack-of-fit is flagged [default: 0.01]
    #[arg(long, value_name = "P")]
    pub lack_of_fit_p: Option<f64>,
    /// AICc by which another rate function must be better to be flagged [default: 10]
    #[arg(long, value_name = "X")]
    pub rival_aicc: Option<f64>,
    /// Standard errors by which a level must fall below a smaller drive's to be flagged non-monotone [default: 4]
    #[arg(long, value_name = "X")]
    pub non_monotone_se: Option<f64>,
    /// Duplicate spike times above which duplicates-dropped is flagged [default: 0]
    #[arg(long, value_name = "N")]
    pub duplicate_spikes: Option<usize>,
    /// Steps the robust fit may cut to less than half their weight without a flag [default: 0]
    #[arg(long, value_name = "N")]
    pub down_weighted_steps: Option<usize>,
    /// Rate functions to fit beside the smoothed hyperbola, comma separated [default: all eight]
    #[arg(long, value_delimiter = ',', value_name = "LIST", value_parser = curve_named)]
    pub curves: Option<Vec<Curve>>,
    /// Do not predict each level from the fit without it
    #[arg(long)]
    pub no_leave_one_out: bool,
    /// Resamples of a bootstrap beside the profile intervals [default: 0, none]
    #[arg(long, value_name = "N")]
    pub bootstrap: Option<usize>,
    /// What a resample is drawn from [default: parametric]
    #[arg(long, value_enum, value_name = "KIND")]
    pub bootstrap_kind: Option<BootstrapName>,
    /// Seed of all random numbers [default: 1]
    #[arg(long, value_name = "N")]
    pub seed: Option<u64>,
    /// Give steps far from the curve less weight (Tukey's biweight)
    #[arg(long)]
    pub robust: bool,
    /// Drives in the grid of curves.parquet [default: 101]
    #[arg(long, value_name = "N")]
    pub curve_points: Option<usize>,
}

impl SettingArguments {
    /// Puts what was typed in place of what `recording.toml` or the defaults say.
    pub fn apply(&self, analysis: &mut Analysis) {
        fn set<T: Copy>(to: &mut T, from: Option<T>) {
            if let Some(value) = from {
                *to = value;
            }
        }
        if let Some(responses) = &self.responses {
            analysis.responses = responses
                .iter()
                .map(|r| match r {
                    ResponseName::Whole => Response::Whole,
                    ResponseName::Steady => Response::Steady,
                    ResponseName::Onset => Response::Onset,
                })
                .collect();
        }
        analysis.profiles &= !self.no_profiles;
        if let Some(figures) = self.figures {
            analysis.figures = match figures {
                FiguresName::All => CellFigures::All,
                FiguresName::Flagged => CellFigures::Flagged,
                FiguresName::None => CellFigures::None,
            };
        }
        if self.no_figures {
            analysis.figures = CellFigures::None;
        }
        analysis.draw_rivals |= self.draw_rivals;
        set(&mut analysis.steady_fraction, self.steady_fraction);
        set(&mut analysis.lvr_refractory_s, self.lvr_refractory_s);
        set(&mut analysis.min_interval_steps, self.min_interval_steps);
        set(&mut analysis.loose_ratio, self.loose_ratio);
        set(&mut analysis.declining_fraction, self.declining_fraction);
        set(&mut analysis.declining_se, self.declining_se);
        set(
            &mut analysis.declining_last_fraction,
            self.declining_last_fraction,
        );
        set(&mut analysis.few_levels, self.few_levels);
        set(&mut analysis.few_spikes, self.few_spikes);
        set(&mut analysis.short_interval_s, self.short_interval_s);
        set(&mut analysis.outside_fraction, self.outside_fraction);
        set(&mut analysis.adaptation_fraction, self.adaptation_fraction);
        set(&mut analysis.irregular_cv, self.irregular_cv);
        set(&mut analysis.stop_intervals, self.stop_intervals);
        set(&mut analysis.curve_points, self.curve_points);
        set(&mut analysis.drift_fraction, self.drift_fraction);
        set(&mut analysis.drift_p, self.drift_p);
        set(&mut analysis.lack_of_fit_p, self.lack_of_fit_p);
        set(&mut analysis.rival_aicc, self.rival_aicc);
        set(&mut analysis.non_monotone_se, self.non_monotone_se);
        set(&mut analysis.duplicate_spikes, self.duplicate_spikes);
        set(&mut analysis.down_weighted_steps, self.down_weighted_steps);
        if let Some(curves) = &self.curves {
            analysis.curves.clone_from(curves);
        }
        analysis.leave_one_out &= !self.no_leave_one_out;
        set(&mut analysis.bootstrap, self.bootstrap);
        if let Some(kind) = self.bootstrap_kind {
            analysis.bootstrap_kind = match kind {
                BootstrapName::Parametric => BootstrapKind::Parametric,
                BootstrapName::Cases => BootstrapKind::Cases,
            };
        }
        set(&mut analysis.seed, self.seed);
        analysis.robust |= self.robust;
    }
}
