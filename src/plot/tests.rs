//! Figures from small synthetic data.

use super::*;

fn view(name: &str, figure: &Figure) {
    if let Ok(dir) = std::env::var("PLOT_VIEW") {
        std::fs::write(format!("{dir}/{name}.svg"), &figure.svg).expect("writes");
        std::fs::write(format!("{dir}/{name}.png"), figure.png().expect("png")).expect("writes");
    }
}

fn morse(depth: f64, a: f64, re: f64, x: f64) -> f64 {
    depth * (1.0 - (-a * (x - re)).exp()).powi(2)
}

fn two_levels() -> CurveFigure {
    let grid: Vec<f64> = (0..47).map(|i| 0.55 + 0.055 * f64::from(i)).collect();
    let level = |name: &str, depth: f64, a: f64, re: f64, shift: f64| CurveLevel {
        name: name.to_owned(),
        points: grid
            .iter()
            .map(|&x| (x, Some(morse(depth, a, re, x) + shift)))
            .collect(),
        minima: vec![CurveMark {
            x: re,
            energy: shift,
            text: None,
        }],
        ..CurveLevel::default()
    };
    let mut first = level("RHF/6-31G*", 720.0, 1.6, 0.947, 0.0);
    first.fits = vec![CurveFit {
        name: "polynomial of order 6".to_owned(),
        points: (0..60)
            .map(|i| 0.72 + 0.012 * f64::from(i))
            .map(|x| {
                (
                    x,
                    morse(720.0, 1.6, 0.947, x) * (1.0 - 0.3 * (x - 0.947).powi(2)),
                )
            })
            .collect(),
    }];
    first.onset = Some(1.42);
    let mut second = level("UHF/6-31G*", 430.0, 2.2, 0.959, 24.0);
    for i in 30..33 {
        second.points[i].1 = None;
    }
    second.limit = Some(CurveLimit {
        energy: 452.0,
        text: None,
    });
    second.findings = vec![20, 31];
    second.second_solution = grid[16..]
        .iter()
        .map(|&x| (x, Some(morse(650.0, 1.7, 0.95, x) + 24.0)))
        .collect();
    CurveFigure {
        title: "Water, one O–H bond stretched".to_owned(),
        notes: vec![
            "Rigid scan; a computed curve is a model’s result at the stated level.".to_owned(),
        ],
        sweep: Axis::new("O–H1 distance", "Å"),
        energy_unit: "kJ/mol".to_owned(),
        zero: "the lowest point of RHF/6-31G*".to_owned(),
        levels: vec![first, second],
    }
}

fn well_and_valley() -> SurfaceFigure {
    let x: Vec<f64> = (0..26).map(|i| 0.7 + 0.08 * f64::from(i)).collect();
    let y: Vec<f64> = (0..24).map(|j| 60.0 + 5.0 * f64::from(j)).collect();
    let mut energies = Vec::new();
    for &r in &x {
        for &angle in &y {
            let bend = (angle - 104.5 - 8.0 * (r - 0.96)).to_radians();
            energies.push(Some(
                morse(480.0, 2.1, 0.957, r) + 230.0 * bend * bend * (-(r - 0.96)).exp(),
            ));
        }
    }
    let ny = y.len();
    energies[20 * ny + 4] = None;
    energies[21 * ny + 4] = None;
    energies[21 * ny + 5] = None;
    SurfaceFigure {
        title: "Water: one bond and the angle".to_owned(),
        notes: vec![],
        level: "RHF/6-31G*".to_owned(),
        x: Axis::new("O–H1 distance", "Å"),
        y: Axis::new("H1–O–H2 angle", "°"),
        energy_unit: "kJ/mol".to_owned(),
        zero: "the lowest point".to_owned(),
        path: x
            .iter()
            .filter(|r| **r > 0.9)
            .map(|r| (*r, 104.5 + 8.0 * (r - 0.96)))
            .collect(),
        x_values: x,
        y_values: y,
        energies,
        cap: None,
        minima: vec![SurfaceMark {
            x: 0.957,
            y: 104.5,
            energy: 0.0,
            text: None,
        }],
        saddles: vec![SurfaceMark {
            x: 2.2,
            y: 150.0,
            energy: 420.0,
            text: None,
        }],
        findings: vec![(15, 18)],
    }
}

#[test]
fn curve_pictures() {
    let figure = two_levels().draw().expect("draws");
    view("curve", &figure);
}

#[test]
fn surface_pictures() {
    let figure = well_and_valley().draw().expect("draws");
    view("surface", &figure);
}

fn audit() -> AuditFigure {
    let x: Vec<f64> = (0..40).map(|i| 0.7 + 0.06 * f64::from(i)).collect();
    let over = |f: &dyn Fn(f64) -> f64| x.iter().map(|&x| Some(f(x))).collect::<Vec<_>>();
    let rhf = AuditLevel {
        name: "RHF/6-31G*".to_owned(),
        x: x.clone(),
        gap: over(&|x| 0.7 * (-(x - 0.7) * 0.5).exp()),
        overlap: over(&|_| 0.999_9),
        stability: over(&|x| 0.25 - 0.2 * (x - 0.3)),
        fock_builds: over(&|x| (3.0 + x).round()),
        ..AuditLevel::default()
    };
    let mut uhf = AuditLevel {
        name: "UHF/6-31G*".to_owned(),
        x: x.clone(),
        s_squared: over(&|x| {
            if x > 1.4 {
                1.0 - (-(x - 1.4) * 2.5).exp()
            } else {
                0.0
            }
        }),
        s_squared_pure: Some(0.0),
        gap: over(&|x| 0.72 * (-(x - 0.7) * 0.2).exp()),
        overlap: over(&|x| 1.0 - 0.02 * (-((x - 1.45) * 9.0).powi(2)).exp()),
        stability: over(&|x| 0.02 + (x - 1.45).abs() * 0.1),
        fock_builds: over(&|x| if (x - 1.5).abs() < 0.1 { 14.0 } else { 4.0 }),
        findings: vec![13],
        failed: vec![30],
        ..AuditLevel::default()
    };
    for list in [
        &mut uhf.s_squared,
        &mut uhf.gap,
        &mut uhf.overlap,
        &mut uhf.stability,
        &mut uhf.fock_builds,
    ] {
        list[30] = None;
    }
    AuditFigure {
        title: "Water, one O–H bond stretched: audit".to_owned(),
        notes: vec![],
        sweep: Axis::new("O–H1 distance", "Å"),
        energy_unit: "hartree".to_owned(),
        levels: vec![rhf, uhf],
    }
}

fn density() -> DensityFigure {
    let x: Vec<f64> = (0..40).map(|i| 0.7 + 0.06 * f64::from(i)).collect();
    let trace = |name: &str, f: &dyn Fn(f64) -> f64| DensityTrace {
        name: name.to_owned(),
        points: x.iter().map(|&x| (x, Some(f(x)))).collect(),
    };
    let s = |x: f64| 1.0 / (1.0 + (-(x - 1.6) * 6.0).exp());
    DensityFigure {
        title: "Water, one O–H bond stretched".to_owned(),
        notes: vec!["UHF/6-31G*".to_owned()],
        sweep: Axis::new("O–H1 distance", "Å"),
        charge_axis: Axis::new("Löwdin charge", "e"),
        charges: vec![
            trace("O", &|x| -0.55 + 0.2 * s(x)),
            trace("H1", &|x| 0.27 * (1.0 - s(x))),
            trace("H2", &|x| 0.28 + 0.05 * s(x)),
        ],
        spin_axis: Axis::new("Löwdin spin population", ""),
        spin_populations: vec![
            trace("O", &|x| 1.02 * s(x)),
            trace("H1", &|x| -s(x)),
            trace("H2", &|x| -0.02 * s(x)),
        ],
        bond_order_axis: Axis::new("Mayer bond order", ""),
        bond_orders: vec![
            trace("O–H1", &|x| 0.9 * (1.0 - s(x))),
            trace("O–H2", &|x| 0.88 + 0.02 * s(x)),
            trace("H1–H2", &|_| 0.01),
        ],
        failed: vec![],
    }
}

fn vibration() -> VibrationFigure {
    let x: Vec<f64> = (0..60).map(|i| 0.55 + 0.04 * f64::from(i)).collect();
    let states = (0..6)
        .map(|v| {
            let n = f64::from(v) + 0.5;
            let energy = 44.0 * n - 1.0 * n * n;
            VibrationState {
                energy,
                name: format!("v = {v}"),
                density: (0..200)
                    .map(|i| 0.6 + 0.007 * f64::from(i))
                    .map(|x| {
                        let q = (x - 0.96 - 0.015 * f64::from(v)) / 0.09;
                        (
                            x,
                            (q * f64::from(v)).cos().powi(2)
                                * (-q * q / (1.0 + f64::from(v))).exp(),
                        )
                    })
                    .collect(),
            }
        })
        .collect();
    VibrationFigure {
        title: "Water, one O–H bond: vibrational states".to_owned(),
        notes: vec![],
        sweep: Axis::new("O–H1 distance", "Å"),
        energy_unit: "kJ/mol".to_owned(),
        zero: "the minimum".to_owned(),
        points: x
            .iter()
            .map(|&x| (x, Some(morse(480.0, 2.2, 0.957, x))))
            .collect(),
        states,
        limit: Some(480.0),
    }
}

#[test]
fn panel_pictures() {
    view("audit", &audit().draw().expect("draws"));
    view("density", &density().draw().expect("draws"));
    view("vibration", &vibration().draw().expect("draws"));
}

fn plain_curve(points: Vec<(f64, Option<f64>)>) -> CurveFigure {
    CurveFigure {
        title: "Degenerate".to_owned(),
        notes: vec![],
        sweep: Axis::new("r", "Å"),
        energy_unit: "kJ/mol".to_owned(),
        zero: String::new(),
        levels: vec![CurveLevel {
            name: "RHF/STO-3G".to_owned(),
            points,
            ..CurveLevel::default()
        }],
    }
}

#[test]
fn zz_pictures() {
    view(
        "one",
        &plain_curve(vec![(1.0, Some(-3.2))]).draw().expect("draws"),
    );
    view(
        "flat",
        &plain_curve((0..9).map(|i| (f64::from(i), Some(0.0))).collect())
            .draw()
            .expect("draws"),
    );
    view(
        "failed",
        &plain_curve((0..9).map(|i| (f64::from(i), None)).collect())
            .draw()
            .expect("draws"),
    );
    let mut wall = plain_curve(
        (0..60)
            .map(|i| 0.3 + 0.05 * f64::from(i))
            .map(|x| (x, Some(morse(450.0, 2.2, 0.95, x))))
            .collect(),
    );
    wall.levels[0].limit = Some(CurveLimit {
        energy: 9000.0,
        text: None,
    });
    wall.levels[0].minima = vec![CurveMark {
        x: 0.95,
        energy: 0.0,
        text: Some("0.950 Å, −76.0105 hartree".to_owned()),
    }];
    view("wall", &wall.draw().expect("draws"));
    let torsion = CurveFigure {
        title: "Hydrogen peroxide, torsion about the O–O bond at many levels of theory, a long headline that has to be broken somewhere because it is long".to_owned(),
        notes: vec!["All other coordinates optimised at every point.".to_owned()],
        sweep: Axis::new("H1–O1–O2–H2 dihedral", "°"),
        energy_unit: "cm⁻¹".to_owned(),
        zero: "each level’s lowest point".to_owned(),
        levels: (0..8)
            .map(|k| {
                let level = f64::from(k);
                CurveLevel {
                    name: format!("UHF/basis set number {k}"),
                    points: (0..73)
                        .map(|i| -180.0 + 5.0 * f64::from(i))
                        .map(|a| {
                            let t = a.to_radians();
                            (a, Some(900.0 * (1.0 + 0.08 * level) + 950.0 * t.cos() + 420.0 * (2.0 * t).cos() + 30.0 * level))
                        })
                        .collect(),
                    ..CurveLevel::default()
                }
            })
            .collect(),
    };
    view("torsion", &torsion.draw().expect("draws"));
    let x: Vec<f64> = (0..15).map(|i| 0.7 + 0.15 * f64::from(i)).collect();
    let mut two = well_and_valley();
    two.title = "Water, both bonds".to_owned();
    two.x = Axis::new("O–H1 distance", "Å");
    two.y = Axis::new("O–H2 distance", "Å");
    two.energies = x
        .iter()
        .flat_map(|&r| {
            x.iter()
                .map(move |&s| Some(morse(450.0, 2.2, 0.95, r) + morse(450.0, 2.2, 0.95, s) + 20.0))
        })
        .collect();
    two.x_values = x.clone();
    two.y_values = x.clone();
    two.minima = vec![SurfaceMark {
        x: 0.95,
        y: 0.95,
        energy: 20.0,
        text: None,
    }];
    two.saddles = vec![];
    two.path = vec![];
    two.findings = vec![];
    view("both", &two.draw().expect("draws"));
    two.energies.iter_mut().for_each(|e| *e = None);
    view("both_failed", &two.draw().expect("draws"));
    two.y_values = vec![1.0];
    two.energies = x
        .iter()
        .map(|r| Some(morse(450.0, 2.2, 0.95, *r)))
        .collect();
    two.energies[3] = None;
    view("row", &two.draw().expect("draws"));
}
