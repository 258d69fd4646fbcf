//! `ellbow inspect`.

use crate::cli::{JobArguments, job, print, typed};
use crate::job::{JobError, Source, load};
use crate::team::Threads;

pub(super) fn run(arguments: JobArguments) -> Result<u8, JobError> {
    let typed = typed(arguments.job.as_deref(), arguments.typed)?;
    let source = Source::new(&typed)?;
    let threads = Threads::resolve(typed.threads);
    let loaded = threads.run(|| load::load(&source)).map_err(job::no_threads)??;
    print(&format!("{}\n", loaded.system.matrix.rows()));
    Ok(0)
}
