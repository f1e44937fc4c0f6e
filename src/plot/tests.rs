//! Figures from small synthetic data.

use proptest::prelude::*;
use resvg::{tiny_skia, usvg};

use super::*;

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

/// All text of the SVG as laid out, with its box in px.
fn texts(figure: &Figure) -> Vec<(String, tiny_skia::Rect)> {
    fn walk(group: &usvg::Group, out: &mut Vec<(String, tiny_skia::Rect)>) {
        for node in group.children() {
            match node {
                usvg::Node::Group(inner) => walk(inner, out),
                usvg::Node::Text(text) => {
                    let words: String = text.chunks().iter().map(|c| c.text()).collect();
                    out.push((words, text.abs_bounding_box()));
                }
                _ => {}
            }
        }
    }
    let options = usvg::Options {
        fontdb: font::database(),
        ..usvg::Options::default()
    };
    let tree = usvg::Tree::from_str(&figure.svg, &options).expect("SVG parses");
    let mut out = Vec::new();
    walk(tree.root(), &mut out);
    for (words, rect) in &out {
        assert!(
            rect.left() >= 0.0
                && rect.top() >= 0.0
                && rect.right() <= tree.size().width()
                && rect.bottom() <= tree.size().height(),
            "{words} is cut off: {rect:?} on {:?}",
            tree.size()
        );
    }
    out
}

/// Holds for every figure: valid SVG without stray numbers, named for blind readers, all words on
/// the sheet and none over another, the expected ones among them; a PNG twice as large, not blank.
fn assert_sound(figure: &Figure, expected: &[&str]) {
    assert!(!figure.svg.contains("NaN") && !figure.svg.contains("inf,"));
    assert!(figure.svg.contains("<title id=") && figure.svg.contains("<desc id="));
    assert!(
        figure
            .svg
            .contains("font-family=\"DejaVu Sans, sans-serif\"")
    );
    let texts = texts(figure);
    for words in expected {
        assert!(
            texts.iter().any(|t| t.0.contains(words)),
            "no {words} in {:?}",
            texts.iter().map(|t| &t.0).collect::<Vec<_>>()
        );
    }
    for (i, (words, a)) in texts.iter().enumerate() {
        for (others, b) in &texts[i + 1..] {
            let across = a.right().min(b.right()) - a.left().max(b.left());
            let down = a.bottom().min(b.bottom()) - a.top().max(b.top());
            // Boxes include the line's whole height; a shared px or three is no collision.
            assert!(across < 1.0 || down < 3.0, "{words} over {others}");
        }
    }
    let png = figure.png().expect("rasterises");
    let pixels = tiny_skia::Pixmap::decode_png(&png).expect("PNG decodes");
    let width: f32 = figure
        .svg
        .split_once("width=\"")
        .and_then(|(_, rest)| rest.split_once('"'))
        .and_then(|(number, _)| number.parse().ok())
        .expect("a width");
    assert_eq!(pixels.width(), (2.0 * width) as u32);
    let inked = pixels
        .pixels()
        .iter()
        .filter(|p| p.red() < 250 || p.green() < 250 || p.blue() < 250)
        .count();
    assert!(inked > 2000, "only {inked} pixels carry ink");
    assert!(pixels.pixels().iter().all(|p| p.alpha() == 255));
}

fn plain_curve(points: Vec<(f64, Option<f64>)>) -> CurveFigure {
    CurveFigure {
        title: "Plain".to_owned(),
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

/// Lines of the given colour with more than two points: curves, not ticks or key samples.
fn long_lines(figure: &Figure, colour: &str) -> usize {
    figure
        .svg
        .lines()
        .filter(|l| l.starts_with("<polyline") && l.contains(colour))
        .filter(|l| l.matches(',').count() > 2)
        .count()
}

#[test]
fn curves_name_everything_they_show() {
    let figure = two_levels().draw().expect("draws");
    assert_sound(
        &figure,
        &[
            "Water, one O–H bond stretched",
            "O–H1 distance (Å)",
            "Energy relative to the lowest point of RHF/6-31G* (kJ/mol)",
            "RHF/6-31G*",
            "UHF/6-31G*, second solution",
            "RHF/6-31G*, polynomial of order 6",
            "0.947 Å",
            "0.959 Å",
            "separated parts 452.0 kJ/mol",
            "instability from 1.420 Å",
            "not converged, no energy",
            "finding, see the report",
        ],
    );
    assert!(figure.svg.contains("44 of 47 points converged"));
}

#[test]
fn other_figures_name_everything_they_show() {
    assert_sound(
        &well_and_valley().draw().expect("draws"),
        &[
            "O–H1 distance (Å)",
            "H1–O–H2 angle (°)",
            "isolines every 50; one tint for all above 600",
            "0.957 Å, 104.5°: 0.0 kJ/mol",
            "kJ/mol",
            "saddle point",
            "valley floor",
            "not converged, no energy",
            "finding, see the report",
            "450",
        ],
    );
    assert_sound(
        &audit().draw().expect("draws"),
        &[
            "⟨S²⟩, line: pure spin state",
            "HOMO–LUMO gap (hartree)",
            "Overlap with the neighbour",
            "Lowest stability eigenvalue (hartree)",
            "Fock builds",
            "UHF/6-31G*",
            "not converged",
        ],
    );
    assert_sound(
        &density().draw().expect("draws"),
        &[
            "Löwdin charge (e)",
            "Löwdin spin population",
            "Mayer bond order",
            "H1–H2",
            "O",
        ],
    );
    assert_sound(
        &vibration().draw().expect("draws"),
        &["v = 0", "21.75", "v = 5", "211.8"],
    );
}

#[test]
fn no_line_crosses_a_failed_point_or_a_break() {
    let points: Vec<(f64, Option<f64>)> = (0..20)
        .map(f64::from)
        .map(|x| (x, Some((x - 8.0).powi(2))))
        .collect();
    let colour = "#1C355B";
    let whole = plain_curve(points.clone()).draw().expect("draws");
    assert_eq!(long_lines(&whole, colour), 1);
    let mut gap = plain_curve(points);
    gap.levels[0].points[9].1 = None;
    gap.levels[0].breaks = vec![15];
    let gap = gap.draw().expect("draws");
    assert_eq!(long_lines(&gap, colour), 3);
    assert_sound(&gap, &["not converged, no energy"]);
}

#[test]
fn a_wall_leaves_the_frame_with_an_arrowhead_and_a_far_limit_is_only_named() {
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
    let figure = wall.draw().expect("draws");
    assert_sound(&figure, &["↑ separated parts 9000.0 kJ/mol", "500"]);
    assert!(!texts(&figure).iter().any(|t| t.0 == "1000"));
    assert!(figure.svg.contains("points above the range shown"));
}

#[test]
fn a_key_without_room_inside_stands_outside() {
    let mut full = plain_curve(vec![]);
    full.levels = (0..30)
        .map(|k| CurveLevel {
            name: format!("level {k}"),
            points: (0..40)
                .map(|i| (f64::from(i), Some(f64::from(k) + f64::from(i % 2))))
                .collect(),
            ..CurveLevel::default()
        })
        .collect();
    let figure = full.draw().expect("draws");
    assert!(!figure.svg.contains("width=\"760\""));
    assert_sound(&figure, &["level 29"]);
}

#[test]
fn sparse_and_failed_sweeps_still_make_figures() {
    let nothing = "No point has a converged energy";
    assert_sound(&plain_curve(vec![]).draw().expect("draws"), &[nothing]);
    let failed = plain_curve((0..5).map(|i| (f64::from(i), None)).collect());
    assert_sound(&failed.draw().expect("draws"), &[nothing]);
    for energies in [
        vec![-3.2],
        vec![1.0, 2.0],
        vec![7.0; 6],
        vec![1.0 + 1e-13, 1.0, 1.0],
    ] {
        let points = energies
            .iter()
            .enumerate()
            .map(|(i, e)| (i as f64, Some(*e)));
        let figure = plain_curve(points.collect()).draw().expect("draws");
        assert_sound(&figure, &["RHF/STO-3G", "r (Å)"]);
    }
}

#[test]
fn surfaces_of_any_shape_make_figures() {
    let mut map = well_and_valley();
    map.path.clear();
    map.findings = vec![(0, 0), (99, 99)];
    map.energies.iter_mut().for_each(|e| *e = None);
    let nothing = "No point has a converged energy";
    assert_sound(&map.draw().expect("draws"), &[nothing]);
    map.energies.iter_mut().for_each(|e| *e = Some(4.0));
    assert_sound(&map.draw().expect("draws"), &["4.000"]);
    for (nx, ny) in [(0, 0), (1, 1), (1, 5), (5, 1), (2, 2), (3, 2)] {
        map.x_values = (0..nx).map(f64::from).collect();
        map.y_values = (0..ny).map(f64::from).collect();
        map.energies = (0..nx * ny)
            .map(|k| (k % 4 != 2).then(|| f64::from(k)))
            .collect();
        assert_sound(&map.draw().expect("draws"), &["O–H1 distance (Å)"]);
    }
}

#[test]
fn panels_without_data_are_left_out() {
    let mut figure = audit();
    figure.levels.truncate(1);
    let drawn = figure.draw().expect("draws");
    assert_sound(&drawn, &["Fock builds"]);
    assert!(!texts(&drawn).iter().any(|t| t.0.contains("⟨S²⟩")));
    figure.levels.clear();
    assert!(
        texts(&figure.draw().expect("draws"))
            .iter()
            .any(|t| t.0 == "No values to show")
    );
    let mut many = density();
    many.bond_orders = (0..30)
        .map(|k| DensityTrace {
            name: format!("pair {k}"),
            points: vec![(1.0, Some(0.01 * f64::from(k))), (2.0, Some(0.0))],
        })
        .collect();
    many.spin_populations.clear();
    let drawn = many.draw().expect("draws");
    assert_sound(&drawn, &["18 smaller not shown", "pair 29"]);
    assert!(!texts(&drawn).iter().any(|t| t.0.contains("spin")));
}

#[test]
fn values_that_are_no_numbers_are_refused_by_name_and_place() {
    let mut curve = two_levels();
    curve.levels[1].points[7].1 = Some(f64::NAN);
    match curve.draw() {
        Err(PlotError::NotFinite { what, index, .. }) => {
            assert_eq!((what.as_str(), index), ("energies of UHF/6-31G*", 7));
        }
        other => panic!("{other:?}"),
    }
    let mut map = well_and_valley();
    map.energies.pop();
    let expected = map.x_values.len() * map.y_values.len();
    assert!(
        matches!(map.draw(), Err(PlotError::Length { expected: e, found, .. })
            if e == expected && found + 1 == expected)
    );
    let mut audit = audit();
    audit.levels[0].gap.pop();
    assert!(matches!(audit.draw(), Err(PlotError::Length { .. })));
    let mut states = vibration();
    states.states[2].energy = f64::INFINITY;
    assert!(matches!(
        states.draw(),
        Err(PlotError::NotFinite { index: 2, .. })
    ));
}

#[test]
fn the_same_data_give_the_same_bytes() {
    assert_eq!(two_levels().draw(), two_levels().draw());
    let first = well_and_valley().draw().expect("draws");
    let second = well_and_valley().draw().expect("draws");
    assert_eq!(first.svg, second.svg);
    assert_eq!(first.png(), second.png());
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(24))]

    #[test]
    fn any_finite_curve_draws(
        points in proptest::collection::vec((-5.0..5.0f64, proptest::option::of(-1e6..1e6f64)), 0..14),
        onset in proptest::option::of(-6.0..6.0f64),
        limit in proptest::option::of(-1e7..1e7f64),
    ) {
        let mut figure = plain_curve(points);
        figure.levels[0].onset = onset;
        figure.levels[0].limit = limit.map(|energy| CurveLimit { energy, text: None });
        figure.levels[0].findings = vec![0, 3, 50];
        figure.levels[0].breaks = vec![2];
        let svg = figure.draw().expect("draws").svg;
        prop_assert!(!svg.contains("NaN"));
    }

    #[test]
    fn any_finite_surface_draws(
        nx in 0usize..5,
        ny in 0usize..5,
        power in -6.0..6.0f64,
        energies in proptest::collection::vec(proptest::option::of(-1.0..1.0f64), 25),
    ) {
        let mut figure = well_and_valley();
        figure.x_values = (0..nx).map(|i| 2.0 - i as f64 * i as f64).collect();
        figure.y_values = (0..ny).map(|j| j as f64 * 0.3).collect();
        figure.energies = (0..nx * ny).map(|k| energies[k].map(|e| e * 10f64.powf(power))).collect();
        let svg = figure.draw().expect("draws").svg;
        prop_assert!(!svg.contains("NaN"));
    }
}
