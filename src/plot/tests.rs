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
