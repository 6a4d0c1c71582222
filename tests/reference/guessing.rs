//! scratch
use crate::codes::*;
use bitassay::scenario::*;
use bitassay::{bound::*, relaxation::level::Level, solver::Limits, witness::check::Place};

fn show(name: &str, s: &Scenario, p: &Vec<Vec<Vec<f64>>>, level: Level) {
    let t = std::time::Instant::now();
    match guessing_probability(s, Setting { x: 0, y: 0 }, Place::Behaviour(p), level, Limits::default()) {
        Answer::Bounded(f) => println!(
            "{name} {level:?}: {} level {:?} cost {:e} {:?} bits {} {}",
            f.bound.rounded_up(),
            f.level,
            f.witness.rounding_cost(),
            t.elapsed(),
            f.witness.witness().factor_bits,
            f.witness.witness().multiplier_bits
        ),
        Answer::Outside(c) => {
            println!("{name} {level:?}: outside {:?} {:?}", c.least_leakage.map(|l| bitassay::exact::round_down(&l.0)), t.elapsed())
        }
        Answer::Unverified => println!("{name} {level:?}: unverified {:?}", t.elapsed()),
    }
}
#[test]
fn scratch() {
    for (bits, v, e) in [(2, 0.99, 1e-3), (2, 1.0, 0.0), (2, 1.001, 0.0), (2, 1.003, 1e-3)] {
        for level in [Level::Lean, Level::Standard, Level::Sharp] {
            show(&format!("{bits} {v} {e}"), &scenario(1 << bits, bits, 2, 2, e), &code(bits, v), level);
        }
    }
    let two = |s: f64| vec![vec![vec![s, 1.0 - s]], vec![vec![1.0 - s, s]]];
    for (e, s, v) in
        [(0.01, 0.597499, 0.645016), (0.01, 0.589499, 0.753777), (0.1, 0.798, 0.809762), (0.1, 0.79, 0.844484), (0.1, 0.75, 0.948554)]
    {
        for level in [Level::Lean, Level::Sharp] {
            show(&format!("two {e} {s} {v}"), &scenario(2, 1, 2, 1, e), &two(s), level);
        }
    }
    let every = |s: Scenario| {
        let mut d: ScenarioDocument = s.into();
        d.leakage_holds = LeakageReading::EveryEmission;
        Scenario::try_from(d).unwrap()
    };
    for (e, s, v) in [(0.1, 0.79, 0.822481), (0.1, 0.75, 0.896723), (0.01, 0.5895, 0.736075)] {
        show(&format!("every {e} {s} {v}"), &every(scenario(2, 1, 2, 1, e)), &two(s), Level::Lean);
    }
    for (c, eta, v) in [(0.9, 0.99, 0.903043), (0.8, 0.99, 0.810572), (0.95, 0.995, 0.950654)] {
        let w = (1.0 - eta) / 3.0;
        let p = vec![vec![vec![eta * (1.0 - c) + w, w, eta * c + w]], vec![vec![w, eta * (1.0 - c) + w, eta * c + w]]];
        show(&format!("unamb every {c} {eta} {v}"), &every(scenario(2, 1, 3, 1, (1.0 - c) / 2.0)), &p, Level::Lean);
        show(&format!("unamb avg {c} {eta} {v}"), &scenario(2, 1, 3, 1, (1.0 - c) / 2.0), &p, Level::Lean);
    }
    show("3->1", &scenario(8, 3, 2, 2, 0.0), &code(3, 1.0), Level::Lean);
    show("3->1", &scenario(8, 3, 2, 2, 0.0), &code(3, 0.99), Level::Lean);
}
