//! No allocation per step, and workspaces as large as stated. A binary of its own: it counts what
//! its threads allocate.

use std::alloc::{GlobalAlloc, Layout, System};
use std::cell::Cell;

use ellbow::base::random::Stream;
use ellbow::kernel::{Twin, Way};
use ellbow::operator::{Frame, Operator, Pass, RowWeights, StoredRows, Weighted};
use ellbow::solve::certificate::Frobenius;
use ellbow::solve::cgls::Cgls;
use ellbow::solve::fan::Fan;
use ellbow::solve::lsmr::Lsmr;
use ellbow::solve::lsqr::Lsqr;
use ellbow::solve::{Lane, Problem, Recurrence, Stepped, StopRules};
use ndarray::Array2;

struct Counting;

thread_local! {
    static CALLS: Cell<u64> = const { Cell::new(0) };
    static LIVE_BYTES: Cell<i64> = const { Cell::new(0) };
}

fn note(calls: u64, bytes: i64) {
    CALLS.with(|count| count.set(count.get() + calls));
    LIVE_BYTES.with(|live| live.set(live.get() + bytes));
}

// A global allocator is unsafe by its trait; this one counts and passes every call on unchanged.
#[allow(unsafe_code)]
unsafe impl GlobalAlloc for Counting {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        note(1, layout.size() as i64);
        unsafe { System.alloc(layout) }
    }

    unsafe fn alloc_zeroed(&self, layout: Layout) -> *mut u8 {
        note(1, layout.size() as i64);
        unsafe { System.alloc_zeroed(layout) }
    }

    unsafe fn dealloc(&self, pointer: *mut u8, layout: Layout) {
        note(0, -(layout.size() as i64));
        unsafe { System.dealloc(pointer, layout) }
    }

    unsafe fn realloc(&self, pointer: *mut u8, layout: Layout, size: usize) -> *mut u8 {
        note(1, size as i64 - layout.size() as i64);
        unsafe { System.realloc(pointer, layout, size) }
    }
}

#[global_allocator]
static COUNTING: Counting = Counting;

const STEPS_MAX: usize = 200;

/// Enough entries a column for several groups of rows, so that a pass splits and adds up.
struct World {
    matrix: StoredRows,
    weights: RowWeights,
    data: Array2<f64>,
    reference: Array2<f64>,
    scales: Vec<f64>,
}

fn world() -> World {
    let (m, n, sets) = (300, 40, 3);
    let stream = Stream::new(31, 0);
    let dense: Vec<f64> = (0..m * n)
        .map(|i| if stream.uniform(i as u64) < 0.3 { stream.normal(i as u64) } else { 0.0 })
        .collect();
    World {
        matrix: StoredRows::from_dense(m, n, &dense),
        weights: RowWeights::Shared((0..m).map(|i| 1.0 + (i % 3) as f64).collect()),
        data: Array2::from_shape_fn((m, sets), |(i, j)| stream.normal((90_000 + 3 * i + j) as u64)),
        reference: Array2::from_elem((n, 1), 0.25),
        scales: (0..n).map(|j| 0.5 + (j % 5) as f64).collect(),
    }
}

fn rules() -> StopRules {
    StopRules {
        gradient_tolerance: 0.0,
        residual_tolerance: 0.0,
        noise_factor: None,
        max_iterations: STEPS_MAX as u64,
        time_limit: None,
    }
}

/// Lists of a few numbers a lane or track, their structs, and boxed values: what the stated
/// bytes leave out.
fn small_change(lanes: usize, tracks: usize) -> i64 {
    1024 + 512 * lanes as i64 + 512 * tracks as i64
}

/// Makes a method, compares its memory with its word, then steps without a single allocation.
fn hold<'a>(
    name: &str,
    problem: &'a Problem<'a>,
    make: impl FnOnce(&[f64]) -> Box<dyn Recurrence + 'a>,
) {
    let frobenius = Frobenius::of(problem);
    let norms: Vec<f64> = problem
        .lanes
        .iter()
        .map(|lane| frobenius.in_steps(problem, lane.set, lane.strengths[0]))
        .collect();
    let before = LIVE_BYTES.get();
    let mut method = make(&norms);
    let allocated = LIVE_BYTES.get() - before;
    let stated = method.workspace_bytes() as i64;
    let rest = allocated - stated;
    println!("{name}: {allocated} bytes allocated, {stated} stated, {rest} unstated");
    let allowed = small_change(problem.lanes.len(), method.tracks());
    assert!((0..=allowed).contains(&rest), "{name}: {rest} of {allowed} allowed");
    method.start();
    let before = CALLS.get();
    let mut iterations = 0;
    while iterations < 60 {
        iterations += u32::from(method.step() == Stepped::Iteration);
    }
    assert_eq!(CALLS.get() - before, 0, "{name}: allocations in {iterations} steps");
}

fn on_one_thread(work: impl FnOnce() + Send) {
    rayon::ThreadPoolBuilder::new().num_threads(1).build().unwrap().install(work);
}

#[test]
fn steps_allocate_nothing_and_workspaces_are_as_stated() {
    let world = world();
    for (scales, stacked) in [(None, false), (Some(world.scales.as_slice()), true)] {
        let matrix = Weighted::new(&world.matrix, &world.weights, scales);
        let problem = |strengths: &[f64]| Problem {
            matrix: &matrix,
            penalty: None,
            stacked,
            data: world.data.view(),
            reference: Some(world.reference.view()),
            start: None,
            lanes: (0..3).map(|set| Lane { set, strengths: strengths.to_vec() }).collect(),
        };
        let many: &[f64] = if stacked { &[0.3] } else { &[3.0, 1.0, 0.3, 0.1] };
        let fan = problem(many);
        let single = problem(&[0.3]);
        let rules = rules();
        on_one_thread(|| {
            hold("LSQR", &fan, |norms| Box::new(Fan::<Lsqr>::new(&fan, norms, STEPS_MAX, None)));
            hold("LSMR", &fan, |norms| Box::new(Fan::<Lsmr>::new(&fan, norms, STEPS_MAX, None)));
            hold("CGLS", &single, |norms| Box::new(Cgls::new(&single, norms, &rules)));
        });
    }
}

/// Strengths chosen after some steps: the vectors kept until then are made before the first step.
#[test]
fn a_scouting_fan_allocates_nothing_in_its_steps_either() {
    let world = world();
    let matrix = Weighted::new(&world.matrix, &world.weights, None);
    let problem = Problem {
        matrix: &matrix,
        penalty: None,
        stacked: false,
        data: world.data.view(),
        reference: None,
        start: None,
        lanes: (0..3).map(|set| Lane { set, strengths: vec![] }).collect(),
    };
    on_one_thread(|| {
        let before = LIVE_BYTES.get();
        let mut fan = Fan::<Lsqr>::new(&problem, &[1.0; 3], STEPS_MAX, Some(20));
        let allocated = LIVE_BYTES.get() - before;
        let rest = allocated - fan.workspace_bytes() as i64;
        assert!((0..=small_change(3, 0)).contains(&rest), "{rest}");
        fan.start();
        let before = CALLS.get();
        (0..20).for_each(|_| assert_eq!(fan.step(), Stepped::Iteration));
        assert_eq!(CALLS.get() - before, 0);
        fan.open(&[3.0, 0.3]);
        let before = CALLS.get();
        (0..20).for_each(|_| assert_eq!(fan.step(), Stepped::Replay));
        (0..20).for_each(|_| assert_eq!(fan.step(), Stepped::Iteration));
        assert_eq!(CALLS.get() - before, 0);
    });
}

/// Neither way allocates, on one thread or on two, with any of the inner loops: enough products for
/// a pass to be shared, enough entries for groups with sums of their own.
#[test]
fn a_pass_allocates_nothing_on_any_of_its_threads() {
    const LANES: usize = 8;
    let (m, n) = (3000, 40);
    let stream = Stream::new(37, 0);
    let dense: Vec<f64> = (0..m * n).map(|i| stream.normal(i)).collect();
    let mut matrix = StoredRows::from_dense(m as usize, n as usize, &dense);
    let scales: Vec<f64> = (0..n).map(|j| 1.0 + j as f64).collect();
    let [v, u] = [n, m].map(|rows| vec![1.0; rows as usize * LANES]);
    for (threads, way) in
        [1, 2].into_iter().flat_map(|t| [Way::OnePass, Way::TwoPhase].map(|w| (t, w)))
    {
        matrix.go(way);
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        for twin in Twin::ALL.into_iter().filter(|twin| twin.is_available()) {
            let operator = Weighted::new(&matrix, &RowWeights::Ones, Some(&scales)).with_twin(twin);
            let (mut u, mut s, mut scratch) = (u.clone(), v.clone(), operator.scratch(LANES));
            let mut passes = |count: usize| {
                (0..count).for_each(|_| {
                    operator.pass(Pass {
                        frame: Frame::Step,
                        sets: &[0; LANES],
                        strengths: &[0.0; LANES],
                        v: &v,
                        alpha: &[0.5; LANES],
                        u: &mut u,
                        s: &mut s,
                        squares: &mut [0.0; LANES],
                        scratch: &mut scratch,
                    });
                });
            };
            // A thread that first looks for work of another's makes room for that, once.
            pool.install(|| passes(20));
            let before = pool.broadcast(|_| CALLS.get());
            pool.install(|| passes(20));
            let after = pool.broadcast(|_| CALLS.get());
            assert_eq!(before, after, "{threads} threads, {way:?}, {twin:?}");
        }
    }
}
