//! `ellbow inspect`.

use crate::base::Warning;
use crate::cli::progress::Console;
use crate::cli::{JobArguments, exit, job, print, typed};
use crate::job::{JobError, Source, forecast, load, quick_fit};
use crate::report;
use crate::system::findings;
use crate::system::inspection::Inspection;
use crate::team::Threads;

pub(super) fn run(arguments: JobArguments) -> Result<u8, JobError> {
    let typed = typed(arguments.job.as_deref(), arguments.typed)?;
    let source = Source::new(&typed)?;
    let threads = Threads::resolve(typed.threads);
    let console = Console::new(arguments.show.quiet);
    let (inspection, warnings) =
        threads.run(|| inspect(&source, &console)).map_err(job::no_threads)??;
    console.close();
    if arguments.show.json {
        let record = serde_json::to_string_pretty(&inspection).expect("a record of plain values");
        print(&format!("{record}\n"));
    } else {
        print(&report::inspect::page(&inspection));
        for warning in warnings {
            print(&format!("\nNote: {warning}\n"));
        }
    }
    Ok(exit::CONVERGED)
}

fn inspect(source: &Source, console: &Console) -> Result<(Inspection, Vec<Warning>), JobError> {
    let loaded = load::load(source, 1)?;
    let system = &loaded.system;
    let facts = system.facts();
    // First of all: it starts from what is resident now.
    let expected = forecast(system);
    let fit = quick_fit(system, &facts, 0, console);
    let found = findings::findings(system, &facts, fit.as_ref());
    let mut inspection = Inspection::new(system, &facts, fit.as_ref(), found);
    inspection.forecast = Some(expected);
    Ok((inspection, loaded.warnings))
}
