//! `ellbow solve` and `ellbow sweep`.

use crate::base::complaint::show;
use crate::cli::progress::Console;
use crate::cli::{JobArguments, Show, exit, print, print_json, say, typed};
use crate::job::{Command, Finished, JobError, Settings, conduct};
use crate::report::page;
use crate::report::record::Summary;
use crate::solve::{Fault, Stop};
use crate::team::Threads;

pub(super) fn run(command: Command, arguments: JobArguments) -> Result<u8, JobError> {
    let typed = typed(arguments.job.as_deref(), arguments.typed)?;
    let settings = Settings::new(command, &typed)?;
    run_settings(&settings, arguments.show)
}

/// Runs a job and prints its page or record.
pub(super) fn run_settings(settings: &Settings, show_as: Show) -> Result<u8, JobError> {
    let threads = Threads::resolve(settings.threads);
    if let Some(warning) = threads.warning.as_ref().filter(|_| !show_as.quiet) {
        say(&format!("note: {warning}"));
    }
    let console = Console::new(show_as.quiet);
    let finished = threads.run(|| conduct(settings, &threads, &console)).map_err(no_threads)??;
    console.close();
    let place = show(&settings.out);
    let (summary, record) = match finished {
        Finished::New(summary) => {
            let record = serde_json::to_value(&*summary).expect("a record of plain values");
            (Some(*summary), record)
        }
        Finished::Before(record) => {
            if !show_as.quiet {
                say("This run is finished already; this is its result. --force runs it again.");
            }
            (serde_json::from_value::<Summary>((*record).clone()).ok(), *record)
        }
    };
    match (&summary, show_as.json) {
        (Some(summary), false) => print(&page::page(summary, &place)),
        _ => print_json(&record),
    }
    Ok(code(&record))
}

/// A run that was stopped early is not converged, whatever its chosen strength did.
fn code(record: &serde_json::Value) -> u8 {
    let flag = |place: &str| record.pointer(place).and_then(serde_json::Value::as_bool);
    let reason = record.pointer("/stop/reason").and_then(serde_json::Value::as_str);
    if reason == Some(Stop::NotFinite(Fault::Norm).word()) {
        exit::BROKE_DOWN
    } else if flag("/stop/converged") == Some(true) && flag("/interrupted") != Some(true) {
        exit::CONVERGED
    } else {
        exit::NOT_CONVERGED
    }
}

pub(super) fn no_threads(error: String) -> JobError {
    JobError::Usage(crate::base::Complaint::new(
        format!("the system grants no threads: {error}"),
        "ask for fewer with --threads",
    ))
}
