//! `ellbow demo`.

use std::path::PathBuf;

use crate::base::complaint::show;
use crate::cli::{Show, job, print, say, typed};
use crate::job::{Command, JobError, Settings, Typed, demo};

#[derive(clap::Args)]
pub(super) struct DemoArguments {
    /// Which problem: embankment
    #[arg(value_name = "NAME", default_value = "embankment")]
    name: String,

    /// Folder for the problem, made if absent; the run lies in a folder below it
    #[arg(long, value_name = "DIR", default_value = "ellbow-demo")]
    out: PathBuf,

    /// Replace a different run that is there
    #[arg(long)]
    force: bool,

    #[command(flatten)]
    show: Show,
}

pub(super) fn run(arguments: &DemoArguments) -> Result<u8, JobError> {
    let problem = demo::find(&arguments.name)?;
    let job_file = demo::write(problem, &arguments.out, arguments.force)?;
    if !arguments.show.quiet {
        say(&format!("Wrote {} to {}.", problem.name, show(&arguments.out)));
        say(&format!("Running: ellbow sweep {}\n", show(&job_file)));
    }
    let flags = Typed { force: Some(arguments.force), ..Typed::default() };
    let settings = Settings::new(Command::Sweep, &typed(Some(&job_file), flags)?)?;
    let code = job::run_settings(&settings, arguments.show)?;
    if !arguments.show.json {
        print(&demo::where_to_look(problem, &arguments.out, &settings)?);
    }
    Ok(code)
}
