//! Geometries of the grid as multi-frame XYZ text, for any viewer.

use crate::job::JobResult;
use crate::units::ANGSTROM_PER_BOHR;
use std::fmt::Write;

/// One frame per point of the grid, in its order; the comment line holds the swept values and the first
/// level's energy.
#[must_use]
pub fn render(result: &JobResult) -> String {
    let mut text = String::new();
    let Some(level) = result.levels.first() else {
        return text;
    };
    for point in &level.points {
        let _ = writeln!(text, "{}", point.positions.len());
        let values: Vec<String> = result
            .sweeps
            .iter()
            .zip(&point.values)
            .map(|(sweep, value)| format!("{}={value}", sweep.column))
            .collect();
        let energy = point.record.energy.map_or_else(
            || "not converged".to_owned(),
            |e| format!("energy_hartree={e}"),
        );
        let _ = writeln!(text, "{} {energy}", values.join(" "));
        for (symbol, position) in result.symbols.iter().zip(&point.positions) {
            let [x, y, z] = [position.x, position.y, position.z].map(|v| v * ANGSTROM_PER_BOHR);
            let _ = writeln!(text, "{symbol:<2} {x:18.12} {y:18.12} {z:18.12}");
        }
    }
    text
}
