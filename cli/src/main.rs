//! The `halfrise` command: arguments, progress, messages, exit codes. What is computed lives in the library.

mod arguments;
mod check;
mod report;

use std::process::ExitCode;
use std::sync::Arc;
use std::sync::atomic::{AtomicBool, Ordering};

use clap::Parser;
use halfrise::recording::{ErrorClass, ReadError};
use halfrise::run::{Job, RunError, run};
use halfrise::tables::WriteErrorClass;

use arguments::{Arguments, Command, WorkArguments};
use report::{Reporter, exit};

fn main() -> ExitCode {
    work().into()
}

fn work() -> exit::Code {
    let arguments = Arguments::parse();
    let common = arguments.command.common();
    let reporter = Reporter::new(common.quiet);
    if let Some(threads) = common.threads
        && let Err(error) = rayon::ThreadPoolBuilder::new()
            .num_threads(threads.get())
            .build_global()
    {
        reporter.error(&format!(
            "cannot start {threads} threads: {error}\n  ask for fewer with --threads"
        ));
        return exit::FAILED;
    }
    // A damaged file can make the table reader panic; that is caught and told as an error of the file.
    std::panic::set_hook(Box::new(|_| {}));
    let cancel = Arc::new(AtomicBool::new(false));
    let flag = Arc::clone(&cancel);
    // Without a handler Ctrl-C still ends the program; only the tidy message is lost.
    let _ = ctrlc::set_handler(move || {
        // The second time means now.
        if flag.swap(true, Ordering::Relaxed) {
            std::process::exit(130);
        }
    });
    let outcome = std::panic::catch_unwind(std::panic::AssertUnwindSafe(|| match &arguments.command {
        Command::Check(check) => check::check(check, &cancel, &reporter),
        Command::Rates(work) => work_on(work, true, &cancel, &reporter),
        Command::Fit(fit) => work_on(&fit.work, false, &cancel, &reporter),
    }));
    outcome.unwrap_or_else(|panic| {
        let what = panic
            .downcast_ref::<&str>()
            .map(|s| (*s).to_owned())
            .or_else(|| panic.downcast_ref::<String>().cloned())
            .unwrap_or_default();
        reporter.error(&format!(
            "internal fault: {what}\n  earlier results are as they were; please report this with the set"
        ));
        exit::FAILED
    })
}

/// `rates` and `fit`.
fn work_on(work: &WorkArguments, rates_only: bool, cancel: &AtomicBool, reporter: &Reporter) -> exit::Code {
    let progress = reporter.progress();
    let adjust = |analysis: &mut halfrise::settings::Analysis| work.settings.apply(analysis);
    let result = run(&Job {
        set: &work.common.set,
        out: work.out.as_deref(),
        overwrite: work.overwrite,
        rates_only,
        adjust: &adjust,
        cancel,
        progress: &|stage| progress.at(stage),
    });
    progress.clear();
    match result {
        Ok(outcome) => {
            if work.common.json {
                println!("{}", report::json(&outcome, rates_only));
            } else {
                reporter.outcome(&outcome, rates_only);
            }
            let refused = outcome.set.refused();
            if !rates_only && outcome.fitted == 0 {
                reporter
                    .error("no cell could be fitted\n  the reasons are in parameters.parquet and summary.md");
                exit::BAD_DATA
            } else if work.common.strict && (refused > 0 || (!rates_only && outcome.unfitted > 0)) {
                reporter.error(&format!(
                    "--strict: {refused} rows refused, {} cell responses without a fit\n  see refused.parquet and \
                     summary.md",
                    if rates_only { 0 } else { outcome.unfitted }
                ));
                exit::BAD_DATA
            } else {
                exit::DONE
            }
        }
        Err(error) => {
            reporter.error(&error.to_string());
            code_of(&error)
        }
    }
}

fn code_of(error: &RunError) -> exit::Code {
    match error {
        RunError::Read(read) => code_of_read(read),
        RunError::Settings(_) => exit::USAGE,
        RunError::Write(write) => match write.class() {
            WriteErrorClass::Exists => exit::USAGE,
            WriteErrorClass::Io => exit::FAILED,
        },
        RunError::Interrupted => exit::INTERRUPTED,
    }
}

fn code_of_read(error: &ReadError) -> exit::Code {
    match (error, error.class()) {
        (ReadError::Interrupted, _) => exit::INTERRUPTED,
        (_, ErrorClass::Io) => exit::FAILED,
        (_, ErrorClass::Settings) => exit::USAGE,
        (_, ErrorClass::Data) => exit::BAD_DATA,
    }
}
