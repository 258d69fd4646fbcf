//! Five invented surveys of five kinds, each with another truth, geometry and noise per seed.

use ellbow::base::random::Stream;
use ellbow::system::{ColumnTable, Units};

use crate::world::{Sigma, World, axis, line};

pub const WORLDS: [fn(u64) -> World; 5] = [crosshole, xray, emission, levelling, gravity];

fn units(data: &str, model: &str, quantity: &str, plausible: (f64, f64)) -> Units {
    Units {
        data: data.into(),
        model: model.into(),
        model_quantity: quantity.into(),
        plausible: Some(plausible),
    }
}

fn empty(name: &'static str, n: usize, sigma: Sigma, units: Units) -> World {
    World {
        name,
        n,
        rows: vec![],
        data: vec![],
        sigma,
        grid: None,
        units,
        ids: vec![],
        groups: vec![],
        group_names: vec![],
        detectors: None,
        columns: ColumnTable::default(),
        reference: None,
    }
}

/// A bump of height 1 about a hashed place.
fn bump(stream: &Stream, index: u64, at: &[f64], size: &[f64], width: f64) -> f64 {
    let squares = at.iter().zip(size).enumerate().map(|(d, (x, size))| {
        let centre = size * (0.2 + 0.6 * stream.uniform(10 * index + d as u64));
        ((x - centre) / width).powi(2)
    });
    (-0.5 * squares.sum::<f64>()).exp()
}

/// Travel times between two boreholes, 16×24 cells of half a metre, slowness in s/m.
fn crosshole(seed: u64) -> World {
    let stream = Stream::new(seed, 1);
    let (nx, nz, h) = (16, 24, 0.5);
    let sigma = Sigma::Formula { absolute: 2e-5, percent: 0.0 };
    let units = units("s", "s/m", "slowness", (1.0 / 5000.0, 1.0 / 200.0));
    let mut world = empty("cross-hole times", nx * nz, sigma, units);
    world.grid = Some((vec![axis("x", nx, h), axis("z", nz, h)], "x".into()));
    let depth = |place: usize, shake: u64| 0.6 + 0.82 * place as f64 + 0.2 * stream.uniform(shake);
    for source in 0..14 {
        world.group_names.push(format!("S{}", source + 1));
        for receiver in 0..14 {
            let from = [1e-6, depth(source, 500 + source as u64), 0.5];
            let to = [8.0 - 1e-6, depth(receiver, 600 + receiver as u64), 0.5];
            world.rows.push(line([nx, nz, 1], [h, h, 1.0], from, to));
            world.ids.push(format!("S{}-R{}", source + 1, receiver + 1));
            world.groups.push(source as u32);
        }
    }
    let background = 1.0 / (1200.0 + 800.0 * stream.uniform(700));
    let truth: Vec<f64> = (0..nx * nz)
        .map(|j| {
            let at = [(j % nx) as f64 * h, (j / nx) as f64 * h];
            let slow = bump(&stream, 1, &at, &[8.0, 12.0], 1.2);
            let fast = bump(&stream, 2, &at, &[8.0, 12.0], 1.5);
            background * (1.0 + 0.3 * slow - 0.15 * fast - 0.01 * at[1])
        })
        .collect();
    world.measure(&truth, seed);
    world
}

/// Parallel beams in nine views through 24×16 cells of a decimetre, attenuation in 1/m.
fn xray(seed: u64) -> World {
    let stream = Stream::new(seed, 2);
    let (nx, ny, h) = (24, 16, 0.1);
    let sigma = Sigma::Formula { absolute: 0.02, percent: 2.0 };
    let units = units("", "1/m", "attenuation", (0.0, 30.0));
    let mut world = empty("few-view x-ray", nx * ny, sigma, units);
    world.grid = Some((vec![axis("x", nx, h), axis("y", ny, h)], "x".into()));
    let mut detectors = Vec::new();
    let turn = 20.0 * stream.uniform(1);
    for view in 0..9 {
        world.group_names.push(format!("view {}", view + 1));
        let (sin, cos) = (turn + 20.0 * f64::from(view)).to_radians().sin_cos();
        for detector in 0..28 {
            let offset = 0.1 * (f64::from(detector) - 13.5);
            let (x, y) = (1.2 - offset * sin, 0.8 + offset * cos);
            let from = [x - 3.0 * cos, y - 3.0 * sin, 0.5];
            let to = [x + 3.0 * cos, y + 3.0 * sin, 0.5];
            let entries = line([nx, ny, 1], [h, h, 1.0], from, to);
            if !entries.is_empty() {
                world.rows.push(entries);
                world.ids.push(format!("V{}-D{}", view + 1, detector + 1));
                world.groups.push(view as u32);
                detectors.push(format!("D{}", detector + 1));
            }
        }
    }
    world.detectors = Some(detectors);
    let truth: Vec<f64> = (0..nx * ny)
        .map(|j| {
            let at = [((j % nx) as f64 + 0.5) * h, ((j / nx) as f64 + 0.5) * h];
            let inside = ((at[0] - 1.2) / 1.05).powi(2) + ((at[1] - 0.8) / 0.7).powi(2) < 1.0;
            let dense = bump(&stream, 3, &at, &[2.4, 1.6], 0.2);
            let hollow = bump(&stream, 4, &at, &[2.4, 1.6], 0.25);
            if inside { (5.0 * (1.0 - 0.8 * hollow) + 12.0 * dense).max(0.0) } else { 0.0 }
        })
        .collect();
    world.measure(&truth, seed);
    world
}

/// Lines of sight of four cameras through 10×8×6 cells, emissivity in W/m³; counting noise.
fn emission(seed: u64) -> World {
    let stream = Stream::new(seed, 3);
    let (cells, spacing) = ([10, 8, 6], [0.05, 0.05, 0.08]);
    let units = units("W/m²", "W/m³", "emissivity", (0.0, 5000.0));
    let mut world = empty("3-D emission", 480, Sigma::Values(vec![]), units);
    let axes = vec![axis("x", 10, 0.05), axis("y", 8, 0.05), axis("z", 6, 0.08)];
    world.grid = Some((axes, "x".into()));
    let size = [0.5, 0.4, 0.48];
    for camera in 0..4u64 {
        world.group_names.push(format!("camera {}", camera + 1));
        let around = (90.0 * camera as f64 + 20.0 + 30.0 * stream.uniform(camera)).to_radians();
        let height = 0.1 + 0.3 * stream.uniform(20 + camera);
        let eye = [0.25 + 1.2 * around.cos(), 0.2 + 1.2 * around.sin(), height];
        for pixel in 0..49 {
            let (u, v) = (f64::from(pixel % 7) - 3.0, f64::from(pixel / 7) - 3.0);
            let towards =
                [0.25 - 0.07 * u * around.sin(), 0.2 + 0.07 * u * around.cos(), 0.24 + 0.065 * v];
            let end: [f64; 3] = std::array::from_fn(|d| eye[d] + 2.0 * (towards[d] - eye[d]));
            let entries = line(cells, spacing, eye, end);
            if !entries.is_empty() {
                world.rows.push(entries);
                world.ids.push(format!("C{}-{}", camera + 1, pixel + 1));
                world.groups.push(camera as u32);
            }
        }
    }
    let truth: Vec<f64> = (0..480)
        .map(|j| {
            let index = [j % 10, j / 10 % 8, j / 80];
            let at: [f64; 3] = std::array::from_fn(|d| (index[d] as f64 + 0.5) * spacing[d]);
            let ring = bump(&stream, 5, &at, &size, 0.09);
            let core = bump(&stream, 6, &at, &size, 0.06);
            100.0 + 1500.0 * ring + 900.0 * core
        })
        .collect();
    let bright = |row: &Vec<(usize, f64)>| row.iter().map(|&(j, a)| a * truth[j]).sum::<f64>();
    let sigma = world.rows.iter().map(|row| (0.3 * bright(row) + 4.0).sqrt()).collect();
    world.sigma = Sigma::Values(sigma);
    world.measure(&truth, seed);
    world
}

/// Height differences between 24 named points, six days of work, one bench mark held.
fn levelling(seed: u64) -> World {
    let stream = Stream::new(seed, 4);
    let units = units("m", "m", "height", (80.0, 160.0));
    let mut world = empty("levelling", 24, Sigma::Values(vec![]), units);
    let place = |p: usize| {
        let shake = |s: u64| 0.3 * (stream.uniform(s + p as u64) - 0.5);
        [(p % 6) as f64 * 0.8 + shake(100), (p / 6) as f64 * 0.8 + shake(200)]
    };
    let truth: Vec<f64> = (0..24)
        .map(|p| {
            if p == 0 {
                101.345
            } else {
                98.0 + 3.0 * place(p)[0] + 12.0 * stream.uniform(300 + p as u64)
            }
        })
        .collect();
    let name = |p: usize| format!("P{:02}", p + 1);
    let mut lines = Vec::new();
    for p in 0..24 {
        if p % 6 < 5 {
            lines.push((p, p + 1));
        }
        if p + 6 < 24 {
            lines.push((p, p + 6));
        }
        if p % 6 < 5 && p + 7 < 24 && stream.uniform(400 + p as u64) < 0.7 {
            lines.push((p, p + 7));
        }
    }
    let again: Vec<_> = lines.iter().copied().filter(|&(p, q)| (p + q) % 5 == 0).collect();
    let once = lines.len();
    lines.extend(again);
    let mut sigma = Vec::new();
    for (i, &(p, q)) in lines.iter().enumerate() {
        let (a, b) = (place(p), place(q));
        let kilometres = (a[0] - b[0]).hypot(a[1] - b[1]);
        world.rows.push(vec![(p, -1.0), (q, 1.0)]);
        let back = if i < once { "" } else { " again" };
        world.ids.push(format!("{}-{}{back}", name(p), name(q)));
        world.groups.push((i * 6 / lines.len()) as u32);
        sigma.push(0.0007 * kilometres.sqrt());
    }
    world.group_names = (1..=6).map(|day| format!("day {day}")).collect();
    world.sigma = Sigma::Values(sigma);
    let mut fixed = vec![f64::NAN; 24];
    fixed[0] = 101.345;
    world.columns = ColumnTable {
        names: Some((0..24).map(name).collect()),
        kinds: Some(vec!["station".into(); 24]),
        fixed: Some(fixed),
        penalty_weights: None,
    };
    // Heights read off a map, to half a metre.
    let read = |(p, h): (usize, &f64)| h + 0.5 * stream.normal(500 + p as u64);
    world.reference = Some(truth.iter().enumerate().map(read).collect());
    world.measure(&truth, seed);
    // Readings are booked to a tenth of a millimetre.
    world.data.iter_mut().for_each(|datum| *datum = (*datum * 1e4).round() / 1e4);
    world
}

/// Gravity in µGal of a layer of 20×14 cells of 2 m, 4 m thick and 5 m deep, over voids; kg/m³.
fn gravity(seed: u64) -> World {
    let stream = Stream::new(seed, 5);
    let (nx, ny, h) = (20, 14, 2.0);
    let sigma = Sigma::Formula { absolute: 5.0, percent: 0.0 };
    let units = units("µGal", "kg/m³", "density contrast", (-2500.0, 300.0));
    let mut world = empty("microgravity", nx * ny, sigma, units);
    world.grid = Some((vec![axis("x", nx, h), axis("y", ny, h)], "x".into()));
    for profile in 0..10u64 {
        world.group_names.push(format!("profile {}", profile + 1));
        for station in 0..15u64 {
            let shake = |s: u64| 0.8 * (stream.uniform(s + 20 * profile + station) - 0.5);
            let at = [
                1.0 + 2.7 * station as f64 + shake(1000),
                1.5 + 2.8 * profile as f64 + shake(2000),
            ];
            let deep = 5.0 + 0.5 * shake(3000);
            let entry = |j: usize| {
                let (x, y) = (((j % nx) as f64 + 0.5) * h, ((j / nx) as f64 + 0.5) * h);
                let square = (x - at[0]).powi(2) + (y - at[1]).powi(2) + deep * deep;
                // G = 6.674e-11 m³/(kg s²) and 1e8 µGal in 1 m/s²; 16 m³ a cell.
                (j, 6.674e-3 * 16.0 * deep / square.powf(1.5))
            };
            world.rows.push((0..nx * ny).map(entry).collect());
            world.ids.push(format!("{}-{}", profile + 1, station + 1));
            world.groups.push(profile as u32);
        }
    }
    let truth: Vec<f64> = (0..nx * ny)
        .map(|j| {
            let at = [(j % nx) as f64 * h, (j / nx) as f64 * h];
            let size = [nx as f64 * h, ny as f64 * h];
            let voids = 1800.0 * bump(&stream, 7, &at, &size, 3.0)
                + 1200.0 * bump(&stream, 8, &at, &size, 2.5);
            60.0 * stream.normal(4000 + j as u64) - voids.min(1900.0)
        })
        .collect();
    world.measure(&truth, seed);
    world
}
