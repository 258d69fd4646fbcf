//! Who does what, and when: units of work handed out in a fixed order.
//!
//! Slices are taken in rounds. A round has *dot* units (some slices of one group, all tiles) and
//! *scatter* units (one tile of one group, all slices of the round). Units are numbered so that a
//! scatter round follows the dots of the round after it, and every thread takes the next number.
//! A unit waits only for units of smaller number, which running threads hold: no thread waits for
//! ever, and with one thread no unit waits at all. One round is the two-phase way; rounds of a few
//! slices, whose entries are still in the caches when they are scattered, are the one-pass way.
//! No sum depends on the rounds.

use std::ops::Range;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};

use super::tiles::Cut;

/// A unit of work.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Unit {
    /// Products of all entries of these slices, and the rows' updates.
    Dots { slices: Range<usize> },
    /// Sums of the columns of a tile over these slices. `first`: the sums begin at 0.
    Scatter { group: usize, tile: usize, slices: Range<usize>, first: bool },
}

/// The units of one pass.
pub struct Schedule<'a> {
    tiles: usize,
    groups: &'a [Range<usize>],
    /// Slices of a group in a round.
    chunk: usize,
    /// Slices of a dot unit.
    unit: usize,
    rounds: usize,
}

impl<'a> Schedule<'a> {
    /// `groups`: slices of each group; a round takes `chunk` of them from each, `unit` at a time.
    pub fn new(cut: &Cut, groups: &'a [Range<usize>], chunk: usize, unit: usize) -> Self {
        let longest = groups.iter().map(ExactSizeIterator::len).max().unwrap_or(0);
        let chunk = chunk.clamp(1, longest.max(1));
        let unit = unit.clamp(1, chunk);
        Self { tiles: cut.tiles(), groups, chunk, unit, rounds: longest.div_ceil(chunk) }
    }

    /// Counters that a pass over so many slices, groups and tiles needs at most.
    pub fn counters(cut: &Cut, groups: usize) -> usize {
        2 + cut.slices() + groups * cut.tiles()
    }

    fn dot_units(&self) -> usize {
        self.groups.len() * self.chunk.div_ceil(self.unit)
    }

    fn scatter_units(&self) -> usize {
        self.groups.len() * self.tiles
    }

    fn slices(&self, round: usize, group: usize) -> Range<usize> {
        let group = &self.groups[group];
        let start = (group.start + round * self.chunk).min(group.end);
        start..(start + self.chunk).min(group.end)
    }

    fn dots(&self, round: usize, place: usize) -> Unit {
        let per_group = self.chunk.div_ceil(self.unit);
        let slices = self.slices(round, place / per_group);
        let start = (slices.start + place % per_group * self.unit).min(slices.end);
        Unit::Dots { slices: start..(start + self.unit).min(slices.end) }
    }

    fn scatter(&self, round: usize, place: usize) -> Unit {
        let group = place / self.tiles;
        let slices = self.slices(round, group);
        Unit::Scatter { group, tile: place % self.tiles, slices, first: round == 0 }
    }

    /// Takes units until there are none left; any number of threads may do so at once, with
    /// the same `counters`, all zero before the first.
    pub fn work(&self, counters: &[AtomicUsize], abandoned: &AtomicBool, run: &impl Fn(Unit)) {
        let (next, counters) = counters.split_first().expect("counters");
        let (dots_done, tiles_done) = counters.split_at(self.rounds);
        let (dots, scatters) = (self.dot_units(), self.scatter_units());
        let each = dots + scatters;
        let mut guard = Guard { abandoned, finished: false };
        loop {
            let number = next.fetch_add(1, Ordering::Relaxed);
            if number >= self.rounds * each {
                break;
            }
            // The dots of round 0, then dots of round r + 1 before the scatter of round r.
            let (round, place) = match number.checked_sub(dots) {
                None => (0, number),
                Some(later) => {
                    let (round, place) = (later / each, later % each);
                    match (round + 1 < self.rounds, place < dots) {
                        (true, true) => (round + 1, place),
                        (true, false) => (round, place),
                        // The last round has no dots to follow.
                        (false, _) => (round, place + dots),
                    }
                }
            };
            if place < dots {
                run(self.dots(round, place));
                dots_done[round].fetch_add(1, Ordering::Release);
            } else {
                let place = place - dots;
                let ready = || {
                    dots_done[round].load(Ordering::Acquire) == dots
                        && tiles_done[place].load(Ordering::Acquire) == round
                };
                if !wait(ready, abandoned) {
                    break;
                }
                run(self.scatter(round, place));
                tiles_done[place].store(round + 1, Ordering::Release);
            }
        }
        guard.finished = true;
    }
}

/// Looks this often before it lets another thread have the core.
const SPINS: usize = 200;

/// Waits until `ready`; `false` if another thread gave up.
fn wait(ready: impl Fn() -> bool, abandoned: &AtomicBool) -> bool {
    let mut looks = 0;
    while !ready() {
        if abandoned.load(Ordering::Relaxed) {
            return false;
        }
        looks += 1;
        if looks < SPINS {
            std::hint::spin_loop();
        } else {
            std::thread::yield_now();
        }
    }
    true
}

/// Tells the others when its thread panics: they would wait for its unit for ever.
struct Guard<'a> {
    abandoned: &'a AtomicBool,
    finished: bool,
}

impl Drop for Guard<'_> {
    fn drop(&mut self) {
        if !self.finished {
            self.abandoned.store(true, Ordering::Relaxed);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::sync::Mutex;

    fn cut() -> Cut {
        Cut { rows: 40 * 2, columns: 3 * 4, tile: 4, slice: 2, band: 5 }
    }

    /// Every unit of a schedule, in the order in which one thread runs them.
    fn order(groups: &[Range<usize>], chunk: usize, unit: usize) -> Vec<Unit> {
        let schedule = Schedule::new(&cut(), groups, chunk, unit);
        let counters: Vec<AtomicUsize> =
            (0..Schedule::counters(&cut(), groups.len())).map(|_| AtomicUsize::new(0)).collect();
        let units = Mutex::new(Vec::new());
        let abandoned = AtomicBool::new(false);
        schedule.work(&counters, &abandoned, &|unit| units.lock().unwrap().push(unit));
        units.into_inner().unwrap()
    }

    #[test]
    fn every_slice_is_multiplied_once_and_scattered_after_in_order() {
        let bounds: [&[usize]; 3] = [&[0, 40], &[0, 15, 40], &[0, 5, 10, 40]];
        for bounds in bounds {
            let groups: Vec<Range<usize>> = bounds.windows(2).map(|b| b[0]..b[1]).collect();
            for (chunk, unit) in [(1, 1), (3, 2), (7, 7), (100, 4), (100, 100)] {
                let mut multiplied = [false; 40];
                let mut scattered = [[false; 40]; 3];
                let mut reached = vec![vec![None; 3]; groups.len()];
                for work in order(&groups, chunk, unit) {
                    match work {
                        Unit::Dots { slices } => slices.for_each(|slice| {
                            assert!(!std::mem::replace(&mut multiplied[slice], true));
                        }),
                        Unit::Scatter { group, tile, slices, first } => {
                            let from = reached[group][tile].unwrap_or(groups[group].start);
                            assert_eq!(first, reached[group][tile].is_none());
                            assert_eq!(slices.start, from);
                            reached[group][tile] = Some(slices.end);
                            slices.for_each(|slice| {
                                assert!(multiplied[slice]);
                                assert!(!std::mem::replace(&mut scattered[tile][slice], true));
                            });
                        }
                    }
                }
                assert!(multiplied.iter().all(|done| *done));
                assert!(scattered.iter().flatten().all(|done| *done));
            }
        }
    }

    #[test]
    fn a_thread_that_panics_ends_the_others() {
        #[allow(clippy::single_range_in_vec_init)]
        let groups = [0..40];
        let cut = cut();
        let schedule = Schedule::new(&cut, &groups, 1, 1);
        let counters: Vec<AtomicUsize> =
            (0..Schedule::counters(&cut, 1)).map(|_| AtomicUsize::new(0)).collect();
        let abandoned = AtomicBool::new(false);
        let fails =
            |unit: Unit| assert!(!matches!(unit, Unit::Dots { slices } if slices.start == 3));
        std::thread::scope(|scope| {
            let threads: Vec<_> = (0..3)
                .map(|_| scope.spawn(|| schedule.work(&counters, &abandoned, &fails)))
                .collect();
            let ends: Vec<bool> = threads.into_iter().map(|t| t.join().is_err()).collect();
            assert_eq!(ends.iter().filter(|failed| **failed).count(), 1);
        });
    }
}
