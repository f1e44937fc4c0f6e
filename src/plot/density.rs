//! Charges, spin populations and bond orders over a sweep.

use super::axis::Axis;
use super::panels::{Panel, Stack, Trace};
use super::style::series;
use super::{Figure, PlotError};

/// Lines a panel can carry and still be read; the smallest ones are left out and counted.
const MOST_LINES: usize = 12;

/// What the density of one level says over the sweep. An empty list leaves its panel out.
#[derive(Debug, Clone, PartialEq)]
pub struct DensityFigure {
    /// headline; may be empty
    pub title: String,
    /// lines of small print under the headline: level, schemes
    pub notes: Vec<String>,
    /// what is swept
    pub sweep: Axis,
    /// name of the charges and their scheme, such as `Löwdin charge`, with unit `e`
    pub charge_axis: Axis,
    /// one line an atom
    pub charges: Vec<DensityTrace>,
    /// name of the spin populations, such as `Löwdin spin population`
    pub spin_axis: Axis,
    /// one line an atom
    pub spin_populations: Vec<DensityTrace>,
    /// name of the bond orders, such as `Mayer bond order`
    pub bond_order_axis: Axis,
    /// one line a pair of atoms
    pub bond_orders: Vec<DensityTrace>,
    /// swept values of points that did not converge
    pub failed: Vec<f64>,
}

/// One atom's or bond's values over the sweep.
#[derive(Debug, Clone, PartialEq)]
pub struct DensityTrace {
    /// atom (`O`, `H1`) or pair (`O–H1`)
    pub name: String,
    /// swept value and quantity in the order of the sweep; none: not known
    pub points: Vec<(f64, Option<f64>)>,
}

impl DensityTrace {
    fn size(&self) -> f64 {
        self.points
            .iter()
            .filter_map(|p| p.1)
            .fold(0.0, |m, v| m.max(v.abs()))
    }
}

impl DensityFigure {
    /// Draws the figure: atoms keep their colour from panel to panel.
    ///
    /// # Errors
    /// [`PlotError::NotFinite`], [`PlotError::Drawing`].
    pub fn draw(&self) -> Result<Figure, PlotError> {
        let lists = [
            (&self.charge_axis, &self.charges),
            (&self.spin_axis, &self.spin_populations),
            (&self.bond_order_axis, &self.bond_orders),
        ];
        let panels: Vec<Panel> = lists
            .into_iter()
            .filter(|(_, traces)| {
                traces
                    .iter()
                    .any(|t| t.points.iter().any(|p| p.1.is_some()))
            })
            .map(|(axis, traces)| panel(axis, traces))
            .collect();
        let names: Vec<String> = panels
            .iter()
            .map(|p| {
                let lines: Vec<&str> = p.traces.iter().map(|t| t.name.as_str()).collect();
                format!("{} of {}", p.label, lines.join(", "))
            })
            .collect();
        Stack {
            title: if self.title.trim().is_empty() {
                "Charges, spins and bond orders".to_owned()
            } else {
                self.title.clone()
            },
            notes: self.notes.clone(),
            description: format!("Panels over {}: {}.", self.sweep.label(), names.join("; ")),
            sweep: self.sweep.clone(),
            panels,
            key: Vec::new(),
            failures: vec![(series(0), self.failed.clone())],
        }
        .draw()
    }
}

fn panel(axis: &Axis, traces: &[DensityTrace]) -> Panel {
    let mut order: Vec<usize> = (0..traces.len()).collect();
    if traces.len() > MOST_LINES {
        order.sort_by(|&a, &b| {
            traces[b]
                .size()
                .total_cmp(&traces[a].size())
                .then(a.cmp(&b))
        });
        order.truncate(MOST_LINES);
        order.sort_unstable();
    }
    let left_out = traces.len() - order.len();
    Panel {
        label: axis.label(),
        traces: order
            .into_iter()
            .map(|k| Trace {
                name: traces[k].name.clone(),
                style: series(k),
                points: traces[k].points.clone(),
                breaks: Vec::new(),
                findings: Vec::new(),
            })
            .collect(),
        references: vec![0.0],
        least: 0.05,
        keyed: true,
        remark: if left_out > 0 {
            format!("{left_out} smaller not shown")
        } else {
            String::new()
        },
    }
}
