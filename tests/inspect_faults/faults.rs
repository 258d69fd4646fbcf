//! The twelve faults, planted into a world.

use ellbow::base::random::Stream;
use ellbow::system::findings::Kind;

use crate::world::{Sigma, World};

pub struct Fault {
    pub name: &'static str,
    /// Kinds of finding that name it; none where assembly must refuse it.
    pub named_by: &'static [Kind],
    /// `None` where it cannot be planted.
    pub plant: fn(World, u64) -> Option<World>,
}

pub const FAULTS: [Fault; 12] = [
    Fault { name: "milliseconds for seconds", named_by: &[Kind::DataUnits], plant: thousandfold },
    Fault { name: "column index shifted", named_by: &[Kind::IndexShift], plant: shifted },
    // With equal spacings a matrix cannot tell the next two apart: one finding names both.
    Fault { name: "axes swapped", named_by: &[Kind::AxesSwapped, Kind::GridOrder], plant: swapped },
    Fault {
        name: "wrong fastest axis",
        named_by: &[Kind::WrongFastestAxis, Kind::GridOrder],
        plant: fastest,
    },
    Fault { name: "sign of the data", named_by: &[Kind::DataSign], plant: sign },
    Fault { name: "variance for sigma", named_by: &[Kind::VarianceForSigma], plant: variance },
    Fault { name: "percent for fraction", named_by: &[Kind::PercentForFraction], plant: percent },
    Fault { name: "permuted rows", named_by: &[Kind::PermutedRows], plant: permuted },
    Fault { name: "dead detector", named_by: &[Kind::DeadDetector], plant: dead },
    Fault { name: "duplicated block", named_by: &[Kind::DuplicatedRows], plant: duplicated },
    Fault { name: "zero sigma", named_by: &[], plant: zero_sigma },
    Fault { name: "one column in other units", named_by: &[Kind::ColumnUnits], plant: column },
];

fn thousandfold(mut world: World, _: u64) -> Option<World> {
    world.data.iter_mut().for_each(|datum| *datum *= 1000.0);
    Some(world)
}

/// One too few, and the first column becomes the last, as an index of −1 does in some languages.
fn shifted(mut world: World, _: u64) -> Option<World> {
    let n = world.n;
    world.rows.iter_mut().flatten().for_each(|entry| entry.0 = (entry.0 + n - 1) % n);
    Some(world)
}

fn swapped(mut world: World, _: u64) -> Option<World> {
    let (axes, _) = world.grid.as_mut()?;
    let last = axes.len() - 1;
    let cells = (axes[0].cells, axes[last].cells);
    (axes[last].cells, axes[0].cells) = cells;
    Some(world)
}

fn fastest(mut world: World, _: u64) -> Option<World> {
    let (axes, fastest) = world.grid.as_mut()?;
    fastest.clone_from(&axes[axes.len() - 1].name);
    Some(world)
}

fn sign(mut world: World, _: u64) -> Option<World> {
    world.data.iter_mut().for_each(|datum| *datum = -*datum);
    Some(world)
}

fn variance(mut world: World, _: u64) -> Option<World> {
    world.sigma = Sigma::Values(world.sigma_values().iter().map(|sigma| sigma * sigma).collect());
    Some(world)
}

/// Percentages lose their factor 100; of other σ every second world's gains it.
fn percent(mut world: World, seed: u64) -> Option<World> {
    let factor = if seed.is_multiple_of(2) { 100.0 } else { 0.01 };
    match &mut world.sigma {
        Sigma::Formula { percent, .. } if *percent > 0.0 => *percent /= 100.0,
        Sigma::Formula { absolute, .. } => *absolute *= factor,
        Sigma::Values(values) => values.iter_mut().for_each(|sigma| *sigma *= factor),
    }
    Some(world)
}

fn permuted(mut world: World, seed: u64) -> Option<World> {
    let stream = Stream::new(seed, 99);
    for last in (1..world.data.len()).rev() {
        world.data.swap(last, (stream.bits(last as u64) % (last as u64 + 1)) as usize);
    }
    Some(world)
}

/// A detector where detectors are named, a run of rows in the cameras, a group elsewhere.
fn dead(mut world: World, seed: u64) -> Option<World> {
    let is_dead: Vec<bool> = match (&world.detectors, world.name) {
        (Some(detectors), _) => detectors.iter().map(|name| name == "D14").collect(),
        (None, "3-D emission") => (0..world.rows.len()).map(|i| (60..72).contains(&i)).collect(),
        _ => world.groups.iter().map(|&group| group == 3).collect(),
    };
    let value = if seed.is_multiple_of(2) {
        0.0
    } else {
        world.data[is_dead.iter().position(|&dead| dead)?]
    };
    for (datum, dead) in world.data.iter_mut().zip(is_dead) {
        if dead {
            *datum = value;
        }
    }
    Some(world)
}

fn duplicated(mut world: World, _: u64) -> Option<World> {
    let sigma = world.sigma_values();
    let formula = matches!(world.sigma, Sigma::Formula { .. });
    let mut values = sigma.clone();
    for i in 20..40 {
        world.rows.push(world.rows[i].clone());
        world.data.push(world.data[i]);
        world.ids.push(world.ids[i].clone());
        world.groups.push(world.groups[i]);
        values.push(sigma[i]);
        if let Some(detectors) = &mut world.detectors {
            detectors.push(detectors[i].clone());
        }
    }
    if !formula {
        world.sigma = Sigma::Values(values);
    }
    Some(world)
}

fn zero_sigma(mut world: World, _: u64) -> Option<World> {
    let mut values = world.sigma_values();
    values[16] = 0.0;
    world.sigma = Sigma::Values(values);
    Some(world)
}

fn column(mut world: World, seed: u64) -> Option<World> {
    let factor = [1000.0, 100.0, 0.001, 1000.0, 0.01][(seed % 5) as usize];
    // The unknown that is seen most: a column nobody sees has no unit.
    let mut hits = vec![0usize; world.n];
    world.rows.iter().flatten().for_each(|&(j, _)| hits[j] += 1);
    let wrong = (0..world.n).max_by_key(|&j| (hits[j], j))?;
    let entries = world.rows.iter_mut().flatten().filter(|entry| entry.0 == wrong);
    entries.for_each(|entry| entry.1 *= factor);
    Some(world)
}
