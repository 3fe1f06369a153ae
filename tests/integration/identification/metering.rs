//! The steam-metering network of Serth and Heenan (AIChE J. 32, 1986, 733), the
//! test bed of this field, as a plant of headers with flow tags alone.
//!
//! First the trials that an independent serial likelihood ratio was run on
//! (Narasimhan and Mah 1987; `tests/reference/steam_metering.py`), then trials of
//! our own, drawn as there: biases of 5 to 25 sigma of any sign, or one leak of 5
//! to 25 sigma of its node's imbalance. Measures are theirs: overall power = errors
//! identified / errors simulated; type I = accusations of the innocent / trials;
//! selectivity = errors identified / accusations. An accusation is right if its
//! first member is a true error, or one whose ratio is the same.

use std::collections::BTreeSet;

use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::report::{Accused, Cause, Report};
use rand::seq::SliceRandom;
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};
use serde_json::Value;

use super::bench::on_threads;
use super::linear::{compiled, flow_tag, flows, numbers};
use super::{batches_each, three_errors};

/// Ratios this near, as a part of the larger, are equal but for rounding: their
/// hypotheses cannot be told apart.
const ALIKE: f64 = 1e-6;
/// Sizes of errors in sigma.
const SIZES: (f64, f64) = (5.0, 25.0);

fn json(text: &str) -> Value {
    serde_json::from_str(text).expect("JSON")
}

/// An error by its cause and the number of its stream or node, as the trials
/// have it.
type Named = (Cause, String);

/// The network, its plant and its published numbers.
struct Metering {
    /// Streams of each node from one, negative where they leave.
    nodes: Vec<Vec<i64>>,
    sigma: Vec<f64>,
    node_sigma: Vec<f64>,
    true_flows: Vec<f64>,
    /// Streams whose bias can be tested, from one.
    fair: Vec<usize>,
    trials: Value,
    plain: Compiled,
    robust: Compiled,
}

/// A trial: readings, and the errors in them with their size.
struct Trial {
    readings: Vec<f64>,
    planted: Vec<(Named, f64)>,
}

impl Metering {
    fn new() -> Self {
        let problem = &json(include_str!("../../data/published/net-serth-heenan.json"))["problem"];
        let trials = json(include_str!(
            "../../data/published/steam-metering-trials.json"
        ));
        let nodes: Vec<Vec<i64>> = (problem["nodes_signed_streams"].as_array())
            .expect("a list")
            .iter()
            .map(|node| numbers(node).into_iter().map(|s| s as i64).collect())
            .collect();
        let sigma = numbers(&problem["sigma"]);
        let hardly: Vec<&str> = (trials["not_hypotheses"].as_array().expect("a list").iter())
            .map(|name| name.as_str().expect("a name"))
            .collect();
        let streams = 1..=sigma.len();
        let (plain, robust) = (plant(&nodes, &sigma, false), plant(&nodes, &sigma, true));
        Metering {
            node_sigma: numbers(&trials["node_sigma"]),
            true_flows: numbers(&trials["true_flows_balanced"]),
            fair: streams
                .filter(|s| !hardly.contains(&s.to_string().as_str()))
                .collect(),
            nodes,
            sigma,
            trials,
            plain: compiled(&plain),
            robust: compiled(&robust),
        }
    }

    fn run(&self, compiled: &Compiled, readings: &[f64]) -> Report {
        let names: Vec<String> = (1..=readings.len()).map(|s| format!("s{s}")).collect();
        let readings = names.iter().zip(readings);
        let batch = flows(readings.map(|(name, &value)| (name.as_str(), value)));
        let report = reconcile(compiled, &batch);
        assert!(report.global_test.is_some(), "{:?}", report.reason);
        report
    }

    /// The flows nearest to the true ones, in sigma, of which `leak` (kg/s) gets
    /// lost at `node`.
    fn leaking(&self, node: usize, leak: f64) -> Vec<f64> {
        let rows = self.nodes.len();
        let sign = |i: usize, j: usize| {
            let signed = self.nodes[i].iter();
            let of_j = signed.filter(|s| s.unsigned_abs() as usize == j + 1);
            of_j.map(|s| s.signum() as f64).sum::<f64>()
        };
        let streams = 0..self.sigma.len();
        let covariance = |i: usize, k: usize| -> f64 {
            let terms = streams.clone();
            terms
                .map(|j| sign(i, j) * self.sigma[j].powi(2) * sign(k, j))
                .sum()
        };
        let matrix = nalgebra::DMatrix::from_fn(rows, rows, covariance);
        let mut lost = nalgebra::DVector::zeros(rows);
        lost[node] = leak;
        let multipliers = matrix.cholesky().expect("positive").solve(&lost);
        let change = |j: usize| -> f64 {
            let terms = (0..rows).map(|i| sign(i, j) * multipliers[i]);
            self.sigma[j].powi(2) * terms.sum::<f64>()
        };
        (streams.clone())
            .map(|j| self.true_flows[j] + change(j))
            .collect()
    }

    /// One trial of so many biases, or with a leak of one node.
    fn draw(&self, biases: usize, leak: bool, rng: &mut ChaCha8Rng) -> Trial {
        let mut planted = Vec::new();
        let mut readings = self.true_flows.clone();
        if leak {
            let node = rng.random_range(0..self.nodes.len());
            let size = rng.random_range(SIZES.0..SIZES.1) * self.node_sigma[node];
            readings = self.leaking(node, size);
            planted.push(((Cause::Leak, (node + 1).to_string()), size));
        }
        for (reading, sigma) in readings.iter_mut().zip(&self.sigma) {
            let noise: f64 = StandardNormal.sample(rng);
            *reading += sigma * noise;
        }
        let mut streams = self.fair.clone();
        streams.shuffle(rng);
        for &s in &streams[..biases] {
            let sign = if rng.random_bool(0.5) { 1.0 } else { -1.0 };
            let size = sign * rng.random_range(SIZES.0..SIZES.1) * self.sigma[s - 1];
            readings[s - 1] += size;
            planted.push(((Cause::Bias, s.to_string()), size));
        }
        Trial { readings, planted }
    }
}

/// The plant file: every node a header.
fn plant(nodes: &[Vec<i64>], sigma: &[f64], robust: bool) -> String {
    let mut streams = String::new();
    for s in 1..=sigma.len() {
        let end = |sign: i64| {
            let at = nodes
                .iter()
                .position(|node| node.contains(&(sign * s as i64)));
            at.map(|node| format!("\"n{}\"", node + 1))
        };
        let from = end(-1).map_or(String::new(), |node| format!(", from = {node}"));
        let to = end(1).map_or(String::new(), |node| format!(", to = {node}"));
        streams += &format!("s{s} = {{ fluid = \"water\"{from}{to} }}\n");
    }
    let equipment: String = (1..=nodes.len())
        .map(|n| format!("n{n} = {{ kind = \"header\" }}\n"))
        .collect();
    let tags: String = (sigma.iter().enumerate())
        .map(|(s, &sigma)| flow_tag(&format!("s{}", s + 1), sigma))
        .collect();
    format!(
        "plant = \"steam-metering\"\ntitle = \"Steam metering (published)\"\nrobust-start = {robust}\n\
         [streams]\n{streams}[equipment]\n{equipment}[tags]\n{tags}"
    )
}

/// An accused hypothesis as the trials name it: `F s12` is bias 12, `n4` leak 4.
fn error(accused: &Accused) -> Named {
    let digits = |c: char| !c.is_ascii_digit();
    let number = accused.hypothesis.of.trim_start_matches(digits);
    (accused.hypothesis.cause, number.to_owned())
}

/// Accusations of a report: of each suspect, the first and what is as likely.
fn accusations(report: &Report) -> Vec<BTreeSet<Named>> {
    let suspects = report.suspects.iter();
    suspects
        .map(|suspect| {
            let first = &suspect.group[0];
            let alike = suspect
                .group
                .iter()
                .filter(|m| (m.ratio - first.ratio).abs() <= ALIKE * first.ratio);
            alike.map(error).collect()
        })
        .collect()
}

/// Measures, summed over trials.
#[derive(Clone, Default)]
struct Measures {
    trials: usize,
    simulated: usize,
    right: usize,
    wrong: usize,
    /// Trials in which all is right and nothing wrong.
    perfect: usize,
    /// Errors above their limit, and those of them that were identified.
    above: usize,
    above_right: usize,
    /// Errors that stand in any group.
    in_groups: usize,
    /// Members of all groups.
    members: usize,
}

impl Measures {
    /// Scores one trial; answers which of the planted were identified.
    fn score(&mut self, accused: &[BTreeSet<Named>], planted: &[Named]) -> Vec<bool> {
        let mut identified = vec![false; planted.len()];
        for alike in accused {
            let mut open = (0..planted.len()).filter(|&p| !identified[p]);
            match open.find(|&p| alike.contains(&planted[p])) {
                Some(p) => identified[p] = true,
                None => self.wrong += 1,
            }
        }
        let right = identified.iter().filter(|&&right| right).count();
        self.trials += 1;
        self.simulated += planted.len();
        self.right += right;
        let perfect = right == planted.len() && accused.len() == right;
        self.perfect += usize::from(perfect);
        identified
    }

    fn power_above(&self) -> f64 {
        self.above_right as f64 / self.above.max(1) as f64
    }

    fn line(&self, what: &str) -> String {
        let part = |a: usize, b: usize| match b {
            0 => "-".to_owned(),
            b => format!("{:.3}", a as f64 / b as f64),
        };
        // What only our reports have.
        let groups = |a: usize, b: usize| part(a, if self.members == 0 { 0 } else { b });
        format!(
            "| {what} | {} | {} | {} | {} | {} | {} | {} |",
            part(self.right, self.simulated),
            part(self.above_right, self.above),
            groups(self.in_groups, self.simulated),
            part(self.wrong, self.trials),
            part(self.right, self.right + self.wrong),
            part(self.perfect, self.trials),
            groups(self.members, self.right + self.wrong),
        )
    }
}

const HEADING: &str = "| errors | search | overall power | above the limit | in a group | type I per trial | selectivity | all right | members a group |\n|---|---|---|---|---|---|---|---|---|";

/// Scores a report of one of our own trials.
fn score(measures: &mut Measures, report: &Report, trial: &Trial) {
    let planted: Vec<Named> = trial
        .planted
        .iter()
        .map(|(error, _)| error.clone())
        .collect();
    let identified = measures.score(&accusations(report), &planted);
    let groups = report.suspects.iter().flat_map(|suspect| &suspect.group);
    let named: BTreeSet<Named> = groups.clone().map(error).collect();
    measures.members += groups.count();
    measures.in_groups += planted.iter().filter(|p| named.contains(p)).count();
    for ((error, size), identified) in trial.planted.iter().zip(identified) {
        if limit(report, error).is_some_and(|limit| size.abs() >= limit) {
            measures.above += 1;
            measures.above_right += usize::from(identified);
        }
    }
}

/// The limit stated for an error.
fn limit(report: &Report, (cause, number): &Named) -> Option<f64> {
    let of = match cause {
        Cause::Bias => format!("F s{number}"),
        _ => format!("n{number}"),
    };
    let mut limits = report.limits.iter();
    let limit = limits.find(|l| l.hypothesis.cause == *cause && l.hypothesis.of == of);
    limit.and_then(|limit| limit.detectable)
}

fn named(value: &Value) -> Named {
    let cause = serde_json::from_value(value["cause"].clone()).expect("a cause");
    (cause, value["of"].as_str().expect("a name").to_owned())
}

/// What the serial search accuses, with what is parallel to each: all that
/// entered, or those that its backward step kept.
fn serial(theirs: &Value, kept: bool) -> Vec<BTreeSet<Named>> {
    let list = |field: &str| theirs[field].as_array().expect("a list").iter();
    let needed: Vec<Named> = list("after_backward").map(named).collect();
    list("serial")
        .filter(|entered| !kept || needed.contains(&named(entered)))
        .map(|entered| {
            let alike = entered["alike"].as_array().expect("a list").iter();
            alike.map(named).chain([named(entered)]).collect()
        })
        .collect()
}

#[test]
fn the_critical_value_and_the_statistics_are_those_of_the_reference() {
    let metering = Metering::new();
    let expected = &metering.trials["critical_values"]["biases-and-leaks"];
    let number = |field: &str| expected[field].as_f64().expect("a number");
    let trials = metering.trials["trials"].as_array().expect("trials");
    for trial in trials {
        let report = metering.run(&metering.plain, &numbers(&trial["measured"]));
        let theirs = &trial["biases-and-leaks"]["at_most_5"];
        let statistic = theirs["statistic"].as_f64().expect("a number");
        let ours = report.global_test.expect("converged");
        assert_eq!(ours.degrees_of_freedom, 11);
        assert!((ours.statistic / statistic - 1.0).abs() < 1e-6, "{ours:?}");
        let test = report.single_test.expect("tested");
        assert_eq!(test.statistics as f64, number("hypotheses"));
        // 10 000 draws of the largest statistic: one standard error of their 95 %
        // quantile is 0.007.
        let apart = test.critical_value - number("critical_value");
        assert!(apart.abs() < 0.03, "{}", test.critical_value);
    }
}

/// The first accused of a trial is the one with the largest statistic, for any
/// search that goes one after another.
#[test]
fn the_largest_statistic_of_each_trial_is_that_of_the_serial_search() {
    let metering = Metering::new();
    let trials = metering.trials["trials"].as_array().expect("trials");
    let mut leads = 0;
    for (n, trial) in trials.iter().enumerate() {
        let report = metering.run(&metering.plain, &numbers(&trial["measured"]));
        let theirs = &serial(&trial["biases-and-leaks"]["at_most_5"], false)[0];
        let z = trial["biases-and-leaks"]["at_most_5"]["serial"][0]["z"].as_f64();
        let possible = report.limits.iter().filter_map(|limit| {
            let z = limit.standardised?;
            (limit.hypothesis.cause == Cause::Bias || z > 0.0).then_some((limit, z))
        });
        let (largest, ours) = possible
            .max_by(|a, b| a.1.abs().total_cmp(&b.1.abs()))
            .expect("tested");
        let digits = |c: char| !c.is_ascii_digit();
        let number = largest.hypothesis.of.trim_start_matches(digits);
        let error = (largest.hypothesis.cause, number.to_owned());
        assert!(
            theirs.contains(&error),
            "trial {n}: {error:?}, not {theirs:?}"
        );
        let z = z.expect("a number").abs();
        assert!(
            (ours.abs() - z).abs() < 1e-5 * z,
            "trial {n}: {ours}, not {z}"
        );
        let first = accusations(&report);
        leads += usize::from(
            first
                .first()
                .is_some_and(|first| !first.is_disjoint(theirs)),
        );
    }
    println!(
        "of {} trials {leads} are still led by it after exchanges",
        trials.len()
    );
}

#[test]
fn no_worse_than_the_serial_search_on_its_own_trials() {
    let metering = Metering::new();
    let trials = metering.trials["trials"].as_array().expect("trials");
    let (mut ours, mut theirs) = (Measures::default(), Measures::default());
    // Named errors that one search identifies and not the other; differences in
    // accusations of the innocent.
    let (mut discordant, mut uneven) = (0, 0);
    for (n, trial) in trials.iter().enumerate() {
        let report = metering.run(&metering.plain, &numbers(&trial["measured"]));
        let listed = trial["planted"].as_array().expect("a list");
        let planted: Vec<Named> = listed.iter().map(named).collect();
        let sizes = listed.iter().map(|p| p["size"].as_f64().expect("a size"));
        let own = Trial {
            readings: Vec::new(),
            planted: planted.iter().cloned().zip(sizes).collect(),
        };
        let before = (ours.wrong, theirs.wrong);
        let a = {
            let mut one = Measures::default();
            one.score(&accusations(&report), &planted)
        };
        score(&mut ours, &report, &own);
        let accused = serial(&trial["biases-and-leaks"]["at_most_5"], true);
        let b = theirs.score(&accused, &planted);
        discordant += a.iter().zip(&b).filter(|(a, b)| a != b).count();
        let (more, less) = (ours.wrong - before.0, theirs.wrong - before.1);
        uneven += more.abs_diff(less);
        if a != b || more != less {
            let case = trial["case"].as_str().expect("a name");
            println!("trial {n}, {case}: ours {a:?} and {more} wrong, serial {b:?} and {less}");
        }
    }
    println!("{HEADING}");
    println!("{}", ours.line("40 trials | ours"));
    println!("{}", theirs.line("40 trials | serial"));
    // Of so many that differ, either way is as likely.
    let chance = |n: usize| 3.0 * (n as f64).sqrt();
    let fewer = theirs.right as f64 - ours.right as f64;
    assert!(fewer <= chance(discordant), "{fewer} of {discordant}");
    let more = ours.wrong as f64 - theirs.wrong as f64;
    assert!(more <= chance(uneven), "{more} of {uneven}");
}

#[test]
fn seeded_trials_with_and_without_a_robust_start() {
    let metering = Metering::new();
    let each = batches_each(16);
    let cases = (1..=7).map(|biases| (biases, false)).chain([(0, true)]);
    println!("{HEADING}");
    for (place, (biases, leak)) in cases.enumerate() {
        let mut rng = ChaCha8Rng::seed_from_u64(1986);
        rng.set_stream(place as u64);
        let trials: Vec<Trial> = (0..each)
            .map(|_| metering.draw(biases, leak, &mut rng))
            .collect();
        let what = if leak {
            "1 leak".to_owned()
        } else {
            format!("{biases} biased")
        };
        for (search, compiled) in [("serial", &metering.plain), ("robust", &metering.robust)] {
            let reports = on_threads(&trials, |trial| metering.run(compiled, &trial.readings));
            let mut measures = Measures::default();
            for (report, trial) in reports.iter().zip(&trials) {
                score(&mut measures, report, trial);
            }
            println!("{}", measures.line(&format!("{what} | {search}")));
            if biases + usize::from(leak) == 1 && search == "serial" {
                let least = 0.9 - three_errors(0.9, measures.above);
                assert!(measures.power_above() >= least, "{what}");
            }
        }
    }
}
