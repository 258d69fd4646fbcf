//! Plants twelve faults in five invented surveys and counts which are named; looks at a hundred
//! sound ones and counts which are accused.

mod faults;
mod world;
mod worlds;

use ellbow::system::findings::{Finding, Severity, findings};
use ellbow::system::{System, SystemError};

use faults::{FAULTS, Fault};
use world::{World, quick_fit};
use worlds::WORLDS;

fn look(world: &World) -> Result<Vec<Finding>, SystemError> {
    let (system, _) = System::assemble(world.parts())?;
    let facts = system.facts();
    let fit = quick_fit(&system, &facts);
    Ok(findings(&system, &facts, Some(&fit)))
}

fn is_accusation(finding: &Finding) -> bool {
    finding.severity != Severity::Note
}

/// Whether the fault was named, and what was said.
fn names(fault: &Fault, world: &World) -> (bool, String) {
    match look(world) {
        Err(SystemError::Uncertainty(complaint)) => {
            (fault.named_by.is_empty() && complaint.cause.contains("row 17 "), complaint.cause)
        }
        Err(other) => (false, other.to_string()),
        Ok(found) => {
            let named = found.iter().any(|finding| fault.named_by.contains(&finding.kind));
            let said: Vec<String> = found
                .iter()
                .filter(|f| is_accusation(f))
                .map(|f| format!("{:?}", f.kind))
                .collect();
            (named, said.join(", "))
        }
    }
}

#[test]
fn planted_faults_are_named() {
    let mut named = 0;
    let mut missed = Vec::new();
    for (place, build) in WORLDS.iter().enumerate() {
        let seed = 1000 + place as u64;
        for fault in &FAULTS {
            let world = build(seed);
            let name = world.name;
            let (found, said) = match (fault.plant)(world, seed) {
                Some(world) => names(fault, &world),
                None => (false, "cannot be planted: there is no grid".into()),
            };
            println!("{:>5} {name}: {} [{said}]", if found { "named" } else { "MISS" }, fault.name);
            named += usize::from(found);
            if !found {
                missed.push(format!("{name}: {} [{said}]", fault.name));
            }
        }
    }
    println!("named {named} of 60; missed:\n  {}", missed.join("\n  "));
    assert!(named >= 42, "{named} of 60 named");
}

#[test]
fn sound_systems_are_not_accused() {
    let mut accused = 0;
    for build in WORLDS {
        for seed in 0..20 {
            let world = build(seed);
            let found = look(&world).expect("a sound system");
            let accusations: Vec<_> = found.iter().filter(|f| is_accusation(f)).collect();
            for finding in &accusations {
                println!(
                    "{} seed {seed}: {:?} {} {:?}",
                    world.name, finding.kind, finding.sentence, finding.evidence
                );
            }
            accused += usize::from(!accusations.is_empty());
        }
    }
    println!("accused {accused} of 100 sound systems");
    assert!(accused < 5, "{accused} of 100 accused");
}
