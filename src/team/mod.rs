//! Who takes part in a run: the threads of one process.

use std::env;

/// How many threads, and what decided it.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize)]
pub struct Threads {
    /// At least 1.
    pub count: usize,
    /// `--threads`, the name of an environment variable, or `affinity`.
    pub from: String,
    /// What to tell the user, if anything.
    pub warning: Option<String>,
}

/// Threads that share a processor at most: more would only wait for each other.
const SHARES_MAX: usize = 4;

/// Variables that grant threads, in order of precedence.
const VARIABLES: [&str; 3] = ["RAYON_NUM_THREADS", "OMP_NUM_THREADS", "SLURM_CPUS_PER_TASK"];

impl Threads {
    /// `asked` wins, also beyond what the affinity mask grants (with a warning, and up to a limit); else the first of
    /// the environment's variables that holds a positive number, capped by the mask; else the mask.
    pub fn resolve(asked: Option<usize>) -> Self {
        let granted = std::thread::available_parallelism().map_or(1, usize::from);
        Self::decide(asked, granted, |name| env::var(name).ok())
    }

    fn decide(
        asked: Option<usize>,
        granted: usize,
        variable: impl Fn(&str) -> Option<String>,
    ) -> Self {
        if let Some(count) = asked {
            let used = count.min(SHARES_MAX * granted);
            let warning = (count > granted).then(|| {
                let rest = if used < count {
                    format!("{used} threads share them")
                } else {
                    "they will share".into()
                };
                format!("--threads {count} is more than the {granted} processors this process may use: {rest}")
            });
            return Self { count: used, from: "--threads".into(), warning };
        }
        for name in VARIABLES {
            // OpenMP allows a list, one number per level of nesting: the first counts.
            let first = variable(name).and_then(|text| text.split(',').next()?.trim().parse().ok());
            if let Some(count) = first.filter(|count: &usize| *count > 0) {
                return Self { count: count.min(granted), from: name.into(), warning: None };
            }
        }
        Self { count: granted, from: "affinity".into(), warning: None }
    }

    /// Runs `work` on a pool of this many threads.
    ///
    /// # Errors
    /// The system's words where it grants no threads.
    pub fn run<T: Send>(&self, work: impl FnOnce() -> T + Send) -> Result<T, String> {
        let pool = rayon::ThreadPoolBuilder::new()
            .num_threads(self.count)
            .thread_name(|i| format!("ellbow-{i}"))
            .build()
            .map_err(|error| error.to_string())?;
        Ok(pool.install(work))
    }
}

/// The launcher's variable that says several processes were started together; they would all
/// write one folder.
pub fn started_as_several() -> Option<(&'static str, usize)> {
    ["OMPI_COMM_WORLD_SIZE", "PMI_SIZE", "SLURM_NTASKS"].into_iter().find_map(|name| {
        let count = env::var(name).ok()?.parse().ok()?;
        // A batch script has SLURM_NTASKS too; only a step started by the launcher has a rank.
        let is_step = name != "SLURM_NTASKS" || env::var("SLURM_STEP_ID").is_ok();
        (count > 1 && is_step).then_some((name, count))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_first_word_on_threads_wins_and_the_mask_caps_what_is_inherited() {
        let environment = |name: &str| match name {
            "OMP_NUM_THREADS" => Some("3,2".to_string()),
            "SLURM_CPUS_PER_TASK" => Some("1".to_string()),
            _ => None,
        };
        let of = |asked, granted| {
            let threads = Threads::decide(asked, granted, environment);
            (threads.count, threads.from, threads.warning.is_some())
        };
        assert_eq!(of(Some(9), 4), (9, "--threads".into(), true));
        assert_eq!(of(Some(2_000_000), 4), (16, "--threads".into(), true));
        assert_eq!(of(None, 4), (3, "OMP_NUM_THREADS".into(), false));
        assert_eq!(of(None, 2), (2, "OMP_NUM_THREADS".into(), false));
        let none = Threads::decide(None, 5, |_| None);
        assert_eq!((none.count, none.from.as_str()), (5, "affinity"));
    }
}
