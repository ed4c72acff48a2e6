//! `trim`: a board whose errors are known, measured through its own firmware and by hand.
//!
//! The scenario's monitor reads leg B 0.4 % high and has filters of 1.6 µs that differ by 1 %, hence
//!
//! ```text
//! G_A = 1/(1 + jωτ·1.005)     G_B = 1.004/(1 + jωτ·0.995)     H = (G_A − G_B)/((G_A + G_B)/2)
//! ```
//!
//! By hand: the Fourier sums of both legs at each tone, over whole seconds, in f64.

use crate::bad_input::assert_refused;
use crate::room::Room;
use std::f64::consts::TAU;

const SECONDS: usize = 6;
const RATE_HZ: usize = 200_000;
const GAIN_ERROR_B: f64 = 0.004;
const TAU_S: f64 = 1.6e-6;
const RC_MISMATCH: f64 = 0.01;
const SKEW_S: f64 = 200e-9;

type Complex = (f64, f64);

fn times(a: Complex, b: Complex) -> Complex {
    (a.0 * b.0 - a.1 * b.1, a.0 * b.1 + a.1 * b.0)
}

fn over(a: Complex, b: Complex) -> Complex {
    let squared = b.0 * b.0 + b.1 * b.1;
    let product = times(a, (b.0, -b.1));
    (product.0 / squared, product.1 / squared)
}

/// Differential over common mode of two legs.
fn conversion(a: Complex, b: Complex) -> Complex {
    over((a.0 - b.0, a.1 - b.1), ((a.0 + b.0) / 2.0, (a.1 + b.1) / 2.0))
}

fn distance(a: Complex, b: Complex) -> f64 {
    (a.0 - b.0).hypot(a.1 - b.1)
}

/// What the scenario's monitor converts.
fn truth(hz: f64) -> Complex {
    let pole = |share: f64| (1.0, TAU * hz * TAU_S * share);
    let leg_a = over((1.0, 0.0), pole(1.0 + RC_MISMATCH / 2.0));
    let leg_b = over((1.0 + GAIN_ERROR_B, 0.0), pole(1.0 - RC_MISMATCH / 2.0));
    conversion(leg_a, leg_b)
}

/// The same from the samples; the tone has whole cycles in a second.
fn by_hand(legs: &[(f64, f64)], hz: usize) -> Complex {
    let turn: Vec<Complex> = (0..RATE_HZ)
        .map(|step| (TAU * step as f64 / RATE_HZ as f64).sin_cos())
        .map(|(sin, cos)| (cos, -sin))
        .collect();
    let (mut a, mut b) = ((0.0, 0.0), (0.0, 0.0));
    for (n, (leg_a, leg_b)) in legs.iter().enumerate() {
        let (cos, sin) = turn[n * hz % RATE_HZ];
        a = (a.0 + leg_a * cos, a.1 + leg_a * sin);
        b = (b.0 + leg_b * cos, b.1 + leg_b * sin);
    }
    // Leg B was sampled later.
    let (sin, cos) = (-TAU * hz as f64 * SKEW_S).sin_cos();
    conversion(a, times(b, (cos, sin)))
}

/// Tones of the scenario that short recordings resolve, Hz.
fn tones(scenario: &str) -> Vec<usize> {
    let mut tones = Vec::new();
    let mut fundamental = 0;
    for line in scenario.lines() {
        if let Some(hz) = line.strip_prefix("hz = ") {
            fundamental = hz.parse::<f64>().unwrap() as usize;
            tones.push(fundamental);
        }
        if let Some(order) = line.split("order = ").nth(1) {
            tones.push(fundamental * order.split(',').next().unwrap().parse::<usize>().unwrap());
        }
    }
    tones
}

fn tied(room: &Room) {
    room.done(&["simulate", "tied-legs", "--seconds", &SECONDS.to_string(), "-o", "tied.csv"]);
}

fn number(point: &toml::Table, key: &str) -> f64 {
    point[key].as_float().unwrap_or_else(|| panic!("no {key} in {point}"))
}

#[test]
fn a_known_mismatch_is_found_within_its_uncertainty_and_as_by_hand() {
    let room = Room::new();
    tied(&room);
    let said = room.done(&["trim", "tied.csv", "-o", "board.toml"]);
    println!("{}", said.out);
    assert!(
        said.out.contains("leg B against leg A") && said.out.contains("10.000 kHz") && said.err.is_empty()
    );
    let file: toml::Table = room.read("board.toml").parse().unwrap();
    assert_eq!(file["sample_rate_hz"].as_float(), Some(RATE_HZ as f64));
    assert!(file["board"].is_str() && file["tool_version"].is_str() && file["measured_utc"].is_str());
    let text = room.read("tied.csv");
    let rows = text.lines().skip_while(|line| !line.contains("leg_a_v")).collect::<Vec<_>>();
    let columns: Vec<&str> = rows[0].split(',').collect();
    let column = |name: &str| columns.iter().position(|column| *column == name).unwrap();
    let (at_a, at_b) = (column("leg_a_v"), column("leg_b_v"));
    let legs: Vec<(f64, f64)> = rows[1..]
        .iter()
        .map(|row| {
            let cells: Vec<&str> = row.split(',').collect();
            (cells[at_a].parse().unwrap(), cells[at_b].parse().unwrap())
        })
        .collect();
    assert_eq!(legs.len(), SECONDS * RATE_HZ);
    let tones = tones(&room.done(&["simulate", "tied-legs", "--print"]).out);
    let points = file["points"].as_array().unwrap();
    let (mut held, mut as_by_hand) = (0, 0);
    for point in points.iter().filter_map(toml::Value::as_table) {
        let hz = number(point, "frequency_hz");
        let near = |tone: &&usize| ((**tone as f64 / hz).ln().abs() * 1e9) as u64;
        let tone = *tones.iter().min_by_key(near).unwrap();
        assert!((tone as f64 / hz).ln().abs() < 0.03, "{hz} Hz is no tone");
        let (found, radius) = ((number(point, "real"), number(point, "imaginary")), number(point, "radius"));
        let (exact, naive) = (truth(tone as f64), by_hand(&legs, tone));
        let magnitude = exact.0.hypot(exact.1);
        println!(
            "{tone} Hz: {:.3e} off, {:.3e} off by hand, radius {radius:.3e} of {magnitude:.3e}",
            distance(found, exact),
            distance(found, naive)
        );
        // Tells something, and is nowhere far off.
        assert!(radius < 0.25 * magnitude && distance(found, exact) < 2.0 * radius, "{tone} Hz");
        assert!(distance(naive, exact) < 5e-4, "by hand at {tone} Hz: {naive:?} for {exact:?}");
        held += usize::from(distance(found, exact) <= radius);
        as_by_hand += usize::from(distance(found, naive) <= radius);
    }
    println!("{held} of {} regions hold the truth, {as_by_hand} the value by hand", points.len());
    assert!(points.len() > 20);
    // 95 % each; of 25 regions more than four miss in one case of thirty.
    assert!(held + 4 >= points.len() && as_by_hand + 4 >= points.len());
}

#[test]
fn a_board_file_serves_other_commands_and_a_stranger_is_named() {
    let room = Room::new();
    tied(&room);
    room.done(&["trim", "tied.csv", "-o", "board.toml"]);
    room.done(&["simulate", "drive-bay", "--seconds", "1", "-o", "drive.csv"]);
    for arguments in [
        &["plot", "drive.csv", "-o", "with.svg", "--board", "board.toml"][..],
        &["analyse", "drive.csv", "-o", "drive.lwlog", "--board", "board.toml"],
        &["report", "drive.lwlog", "--board", "board.toml"],
    ] {
        assert_eq!(room.done(arguments).err, "", "{arguments:?}");
    }
    assert!(room.read("with.svg").contains("the board's own, legs tied"));
    room.done(&["plot", "drive.lwlog", "-o", "without.svg"]);
    assert!(!room.read("without.svg").contains("the board's own, legs tied"));
    // Below its own conversion nothing is claimed: all of it is the board's.
    room.done(&["plot", "tied.csv", "-o", "own.svg", "--board", "board.toml"]);
    let own = room.read("own.svg");
    assert!(own.contains("class=\"limit\"") && !own.contains("class=\"line\""), "the board's own is claimed");
    let slower = room.read("board.toml").replace("sample_rate_hz = 200000.0", "sample_rate_hz = 100000.0");
    room.write("slower.toml", slower.replace("board = \"desktop\"", "board = \"bench 7\""));
    let ran = room.done(&["report", "drive.lwlog", "--board", "slower.toml"]);
    for words in ["100 k pairs/s", "200 k pairs/s", "\"bench 7\"", "\"desktop\"", "try"] {
        assert!(ran.err.contains(words), "no '{words}' in {}", ran.err);
    }
}

#[test]
fn recordings_that_are_not_of_tied_legs_are_refused_with_the_reason() {
    let room = Room::new();
    tied(&room);
    room.done(&["simulate", "quiet-night", "--seconds", "1", "-o", "bus.csv"]);
    let scenario = room.done(&["simulate", "tied-legs", "--print"]).out;
    room.write("still.toml", scenario.replace("peak_v = 0.12", "peak_v = 0.0"));
    room.done(&["simulate", "still.toml", "--seconds", "2", "-o", "still.csv"]);
    room.write("one.toml", scenario.replace("coupling.pair = {}", "coupling.pair = { imbalance = 1.0 }"));
    room.done(&["simulate", "one.toml", "--seconds", "2", "-o", "one.csv"]);
    // A clip that holds badly: three tenths, and little enough that the pair still counts as resting.
    let bad = scenario.replace("coupling.pair = {}", "coupling.pair = { imbalance = 0.3 }");
    room.write("bad.toml", bad.replace("peak_v = 0.12", "peak_v = 0.02"));
    room.done(&["simulate", "bad.toml", "--seconds", "2", "-o", "bad.csv"]);
    room.done(&["simulate", "tied-legs", "--seconds", "0.02", "-o", "short.csv"]);
    room.write("there.toml", "");
    let before = room.files();
    for (arguments, code, fragment) in [
        (&["trim", "bus.csv", "-o", "x.toml"][..], 3, "driven apart"),
        (&["trim", "still.csv", "-o", "x.toml"], 3, "enough common mode"),
        (&["trim", "one.csv", "-o", "x.toml"], 3, "driven apart"),
        (&["trim", "bad.csv", "-o", "x.toml"], 3, "29 % of the common mode, too much for tied legs"),
        (&["trim", "short.csv", "-o", "x.toml"], 3, "longer recording"),
        (&["trim", "tied.csv", "-o", "there.toml"], 5, "exists already"),
        (&["trim", "tied.csv", "-o", "tied.toml"], 2, "describes the recording"),
        (&["trim", "tied.csv", "-o", "no/x.toml"], 5, "no/x.toml"),
        (&["trim", "none.csv", "-o", "x.toml"], 3, "none.csv"),
    ] {
        let ran = room.run(arguments);
        println!("{arguments:?}: {}", ran.err.trim_end());
        assert_refused(&ran, code, fragment);
        assert_eq!(room.files(), before, "{arguments:?}");
    }
}
