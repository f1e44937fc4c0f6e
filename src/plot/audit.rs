//! The audit of electronic states as a figure: one panel a check, one colour a level.

use super::axis::Axis;
use super::panels::{Panel, Stack, Trace};
use super::style::series;
use super::{Figure, PlotError};

/// Checks of every point over the sweep.
#[derive(Debug, Clone, PartialEq)]
pub struct AuditFigure {
    /// headline; may be empty
    pub title: String,
    /// lines of small print under the headline
    pub notes: Vec<String>,
    /// what runs along the panels: the sweep, or the position along the walk of a surface
    pub sweep: Axis,
    /// unit of gaps and stability eigenvalues, as printed
    pub energy_unit: String,
    /// the levels
    pub levels: Vec<AuditLevel>,
}

/// One level's checks. Every list is as long as `x`, or empty where the check was not made; a
/// panel that no level fills is left out.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct AuditLevel {
    /// name in the key
    pub name: String,
    /// swept values in the order of the sweep
    pub x: Vec<f64>,
    /// ⟨S²⟩
    pub s_squared: Vec<Option<f64>>,
    /// ⟨S²⟩ of a pure spin state, S(S+1), drawn as a line
    pub s_squared_pure: Option<f64>,
    /// HOMO–LUMO gap
    pub gap: Vec<Option<f64>>,
    /// overlap of the occupied space with the neighbour's, 0–1
    pub overlap: Vec<Option<f64>>,
    /// lowest eigenvalue of the stability matrix, negative for an unstable solution
    pub stability: Vec<Option<f64>>,
    /// Fock builds of the SCF that gave the kept solution
    pub fock_builds: Vec<Option<f64>>,
    /// indices of points that did not converge
    pub failed: Vec<usize>,
    /// indices of points that no line joins to the point before them
    pub breaks: Vec<usize>,
    /// indices of points with a finding, ringed
    pub findings: Vec<usize>,
}

impl AuditFigure {
    /// Draws the figure.
    ///
    /// # Errors
    /// [`PlotError::Length`] for a list that is neither empty nor as long as `x`,
    /// [`PlotError::NotFinite`], [`PlotError::Drawing`].
    pub fn draw(&self) -> Result<Figure, PlotError> {
        type Check = fn(&AuditLevel) -> &Vec<Option<f64>>;
        // label, unit, values, smallest range, reference lines
        let mut pure: Vec<f64> = Vec::new();
        for value in self.levels.iter().filter_map(|l| l.s_squared_pure) {
            if !pure.iter().any(|p| (p - value).abs() < 1e-6) {
                pure.push(value);
            }
        }
        let unit = self.energy_unit.as_str();
        let checks: [(&str, &str, Check, f64, Vec<f64>); 5] = [
            (
                "⟨S²⟩, line: pure spin state",
                "",
                |l| &l.s_squared,
                0.02,
                pure.clone(),
            ),
            ("HOMO–LUMO gap", unit, |l| &l.gap, 1e-3, vec![]),
            (
                "Overlap with the neighbour",
                "",
                |l| &l.overlap,
                0.01,
                vec![],
            ),
            (
                "Lowest stability eigenvalue",
                unit,
                |l| &l.stability,
                1e-3,
                vec![0.0],
            ),
            ("Fock builds", "", |l| &l.fock_builds, 6.0, vec![0.0]),
        ];
        let mut panels = Vec::new();
        for (quantity, unit, values, least, references) in checks {
            let mut traces = Vec::new();
            for (k, level) in self.levels.iter().enumerate() {
                let values = values(level);
                if values.is_empty() {
                    continue;
                }
                if values.len() != level.x.len() {
                    return Err(PlotError::Length {
                        what: format!("{quantity} of {}", level.name),
                        expected: level.x.len(),
                        found: values.len(),
                    });
                }
                traces.push(Trace {
                    name: level.name.clone(),
                    style: series(k),
                    points: level
                        .x
                        .iter()
                        .copied()
                        .zip(values.iter().copied())
                        .collect(),
                    breaks: level.breaks.clone(),
                    findings: level.findings.clone(),
                });
            }
            let filled = traces
                .iter()
                .any(|t| t.points.iter().any(|p| p.1.is_some()));
            if filled {
                let quantity = if pure.is_empty() {
                    quantity.replace(", line: pure spin state", "")
                } else {
                    quantity.to_owned()
                };
                panels.push(Panel {
                    label: Axis::new(quantity, unit).label(),
                    traces,
                    references,
                    least,
                    keyed: false,
                    remark: String::new(),
                });
            }
        }
        let names: Vec<&str> = panels.iter().map(|p| p.label.as_str()).collect();
        let description = format!(
            "Panels over {}: {}. Levels: {}. {} points did not converge, {} have findings.",
            self.sweep.label(),
            names.join("; "),
            self.levels
                .iter()
                .map(|l| l.name.as_str())
                .collect::<Vec<_>>()
                .join(", "),
            self.levels.iter().map(|l| l.failed.len()).sum::<usize>(),
            self.levels.iter().map(|l| l.findings.len()).sum::<usize>(),
        );
        Stack {
            title: if self.title.trim().is_empty() {
                "Audit of the electronic states".to_owned()
            } else {
                self.title.clone()
            },
            notes: self.notes.clone(),
            sweep: self.sweep.clone(),
            panels,
            key: self
                .levels
                .iter()
                .enumerate()
                .map(|(k, level)| (level.name.clone(), series(k), level.x.len()))
                .collect(),
            failures: self
                .levels
                .iter()
                .enumerate()
                .map(|(k, level)| {
                    let at = level.failed.iter().filter_map(|&i| level.x.get(i).copied());
                    (series(k), at.collect())
                })
                .collect(),
            description,
        }
        .draw()
    }
}
