//! Builds a scan in Rust: hydrogen fluoride stretched, the energies printed as the walk goes.
//!
//! `cargo run --release --example stretch`

use std::io::Write;
use std::path::Path;
use std::sync::atomic::AtomicBool;
use thalweg::job::{self, JobEvent};
use thalweg::scan::Event;
use thalweg::spec;

const SPEC: &str = r#"
title = "Hydrogen fluoride, stretched"
[molecule]
zmatrix = """
F
H F 0.917
"""
[[level]]
method = "uhf"
basis = "6-31g**"
[[sweep]]
bond = ["F", "H"]
from = 0.7
to = 2.7
step = 0.1
"#;

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let spec = spec::parse(SPEC, Path::new("stretch.toml"))?;
    let pool = rayon::ThreadPoolBuilder::new().build()?;
    let mut out = std::io::stdout();
    let record = job::run(&spec, &pool, &AtomicBool::new(false), &mut |event| {
        if let JobEvent::Walk {
            event: Event::Evaluated(entry),
            ..
        } = event
        {
            // A closed pipe only means that nobody reads on.
            let _ = writeln!(out, "point {:>2}: {:?}", entry.point, entry.record.energy);
        }
    })?;
    let result = job::assemble(&spec, &record)?;
    for level in &result.levels {
        if let (Some(lowest), Some(de)) = (level.lowest(), level.dissociation_energy()) {
            writeln!(
                out,
                "{}: lowest at {:?} Å, De {de:.6} hartree",
                level.name, lowest.values
            )?;
        }
    }
    Ok(())
}
