//! `points.csv`: one row per level and point, units in the column names.

use crate::job::{JobResult, LevelResult, PointResult, SweepResult};
use crate::spec::Spec;
use crate::units::DEBYE_PER_AU;

/// The table as CSV text. Relative energies count from
/// [`JobResult::zero_of`]; a point that did not converge has
/// empty energies.
#[must_use]
pub fn render(spec: &Spec, result: &JobResult) -> Vec<u8> {
    let mut writer = ::csv::Writer::from_writer(Vec::new());
    // Writing to memory cannot fail, and every row has as many fields as the header.
    let _ = writer.write_record(header(spec, result));
    for level in &result.levels {
        let zero = result.zero_of(level);
        for point in &level.points {
            let _ = writer.write_record(row(spec, level, point, zero));
        }
    }
    writer.into_inner().unwrap_or_default()
}

fn header(spec: &Spec, result: &JobResult) -> Vec<String> {
    let mut names = vec!["level".to_owned()];
    names.extend(result.sweeps.iter().map(|s| s.column.clone()));
    names.push("energy_hartree".to_owned());
    if spec.output.gradients {
        names.extend(
            result
                .sweeps
                .iter()
                .map(|s| format!("slope_{}_hartree_per_{}", stem(s), s.unit)),
        );
    }
    names.push(format!("relative_{}", spec.output.energy.column()));
    names.extend(
        [
            "converged",
            "fock_builds",
            "s_squared",
            "homo_hartree",
            "lumo_hartree",
            "dipole_debye",
            "findings",
        ]
        .map(str::to_owned),
    );
    names
}

/// The name of a sweep's column without its unit.
fn stem(sweep: &SweepResult) -> String {
    let column = &sweep.column;
    let unit = format!("_{}", sweep.unit);
    column.strip_suffix(&unit).unwrap_or(column).to_owned()
}

fn row(spec: &Spec, level: &LevelResult, point: &PointResult, zero: Option<f64>) -> Vec<String> {
    let number = |value: Option<f64>| value.map(|v| v.to_string()).unwrap_or_default();
    let record = &point.record;
    let mut fields = vec![level.name.clone()];
    fields.extend(point.values.iter().map(f64::to_string));
    fields.push(number(record.energy));
    if spec.output.gradients {
        let slopes = (0..spec.sweeps.len()).map(|k| point.slopes.as_ref().and_then(|s| s.get(k)));
        fields.extend(slopes.map(|s| number(s.copied().filter(|_| record.energy.is_some()))));
    }
    fields.push(number(
        record
            .energy
            .zip(zero)
            .map(|(e, zero)| (e - zero) * spec.output.energy.per_hartree()),
    ));
    let converged = record.energy.is_some();
    // What belongs to a density that is not a solution is left empty too.
    let of_solution = |value: f64| number(converged.then_some(value));
    fields.push(converged.to_string());
    fields.push(record.fock_builds.to_string());
    fields.push(of_solution(record.s_squared));
    fields.push(number(record.homo.filter(|_| converged)));
    fields.push(number(record.lumo.filter(|_| converged)));
    fields.push(of_solution(dipole_debye(record.dipole)));
    let findings: Vec<&str> = point.findings.iter().map(|f| f.word()).collect();
    fields.push(findings.join(" "));
    fields
}

/// Length of a dipole vector given in e·bohr, in debye.
#[must_use]
pub fn dipole_debye(dipole: [f64; 3]) -> f64 {
    dipole.iter().map(|d| d * d).sum::<f64>().sqrt() * DEBYE_PER_AU
}
