//! Seeded batches of the demonstration plant, and what is planted in them.

use counterpoise::demo::{self, Assumed, Conditions, Fault, LineUp, Truth};
use counterpoise::pipeline::{Compiled, reconcile};
use counterpoise::plant::{Batch, COVERAGE_FACTOR, EquipmentId, Plant, StreamId};
use counterpoise::report::{Cause, Hypothesis, Report};
use rand::{Rng, SeedableRng};
use rand_chacha::ChaCha8Rng;
use time::macros::datetime;

use crate::defects::{Defect, Disturber};

const SEED: u64 = 1979;
const THREADS: usize = 2;

/// The demonstration plant, compiled once.
pub struct Bench {
    pub plant: Plant,
    pub compiled: Compiled,
    pub disturber: Disturber,
}

/// A batch without errors, and what it was made from.
pub struct Clean {
    pub truth: Truth,
    noise: ChaCha8Rng,
    name: String,
}

impl Bench {
    pub fn new() -> Self {
        let plant = demo::lined_up(LineUp::default()).expect("no faults");
        Bench {
            compiled: Compiled::new(plant.clone(), 1),
            disturber: Disturber::new(&plant),
            plant,
        }
    }

    /// A clean batch by its number; the same number is the same batch. Of some
    /// ten thousand one has conditions and assumptions that the unit's heat
    /// balance does not settle at: that one is drawn again.
    pub fn clean(&self, number: usize) -> Clean {
        const MOST_DRAWS: u64 = 3;
        for draw in 0..MOST_DRAWS {
            let mut rng = ChaCha8Rng::seed_from_u64(SEED + draw);
            rng.set_stream(number as u64);
            let conditions = Conditions {
                fouling: rng.random_range(0.0..3.0),
                ..Conditions::at_load(rng.random_range(0.6..1.0))
            };
            let assumed = Assumed::drawn(&self.plant, &mut rng);
            if let Ok(truth) = demo::truth(&conditions, &assumed) {
                return Clean {
                    truth,
                    noise: rng,
                    name: format!("batch {number}"),
                };
            }
        }
        panic!("batch {number} does not settle");
    }

    /// Its readings, of this truth and with these faults of tags.
    pub fn batch(&self, clean: &Clean, truth: &Truth, faults: &[(String, Fault)]) -> Batch {
        let fault = |tag: &counterpoise::plant::Tag| {
            let mut faults = faults.iter().filter(|(name, _)| *name == tag.name);
            faults.next().map(|(_, fault)| *fault)
        };
        let mut noise = clean.noise.clone();
        Batch {
            name: clean.name.clone(),
            start: datetime!(2026-03-18 00:00 UTC),
            end: datetime!(2026-03-18 00:05 UTC),
            readings: demo::readings(&self.plant, truth, &mut noise, fault).expect("known"),
            steadiness: None,
        }
    }

    /// The report of the clean batch.
    pub fn report(&self, clean: &Clean) -> Report {
        reconcile(&self.compiled, &self.batch(clean, &clean.truth, &[]))
    }

    pub fn equipment(&self, name: &str) -> EquipmentId {
        let place = self.plant.equipment.iter().position(|e| e.name == name);
        EquipmentId(place.expect("a piece of equipment"))
    }

    /// The defect of a hypothesis that blames the plant.
    pub fn defect(&self, hypothesis: &Hypothesis, size: f64) -> Defect {
        match hypothesis.cause {
            Cause::Leak => Defect::Leak {
                of: self.equipment(&hypothesis.of),
                side: hypothesis.side.clone().expect("a side"),
                size,
            },
            Cause::LeakBetween => Defect::Tubes {
                of: self.equipment(&hypothesis.of),
                size,
            },
            Cause::HeatLoss => Defect::HeatLoss {
                of: self.equipment(&hypothesis.of),
                size,
            },
            Cause::Passing => {
                let place = self
                    .plant
                    .streams
                    .iter()
                    .position(|s| s.name == hypothesis.of);
                Defect::Passing {
                    stream: StreamId(place.expect("a stream")),
                    size,
                }
            }
            Cause::Bias | Cause::Departure => panic!("no defect of the plant"),
        }
    }
}

/// What was planted.
#[derive(Clone, Debug)]
pub struct Planted {
    pub hypothesis: Hypothesis,
    /// In its unit.
    pub size: f64,
}

/// Plants one error in a clean batch, of `limits` times the limit stated for it
/// and `sigmas` sigma of a tag at least; `None` where the plant cannot bear it.
pub fn plant_one(
    bench: &Bench,
    clean: &Clean,
    report: &Report,
    hypothesis: &Hypothesis,
    limits: f64,
    sigmas: f64,
) -> Option<(Batch, Planted)> {
    let (truth, faults, size) = made(
        bench,
        clean,
        &clean.truth,
        report,
        hypothesis,
        (limits, sigmas),
    )?;
    let batch = bench.batch(clean, &truth, &faults);
    let hypothesis = hypothesis.clone();
    Some((batch, Planted { hypothesis, size }))
}

/// Plants two at once.
pub fn plant_two(
    bench: &Bench,
    clean: &Clean,
    report: &Report,
    pair: [&Hypothesis; 2],
    limits: f64,
) -> Option<Batch> {
    let mut truth = clean.truth.clone();
    let mut faults = Vec::new();
    for hypothesis in pair {
        let (next, more, _) = made(bench, clean, &truth, report, hypothesis, (limits, 0.0))?;
        truth = next;
        faults.extend(more);
    }
    Some(bench.batch(clean, &truth, &faults))
}

/// A truth with an error in it, or faults of tags, and the size of the error.
type Made = (Truth, Vec<(String, Fault)>, f64);

fn made(
    bench: &Bench,
    clean: &Clean,
    truth: &Truth,
    report: &Report,
    hypothesis: &Hypothesis,
    (limits, sigmas): (f64, f64),
) -> Option<Made> {
    let limit = report
        .limits
        .iter()
        .find(|limit| limit.hypothesis == *hypothesis)?;
    let detectable = limit.detectable?;
    if hypothesis.cause != Cause::Bias {
        let size = limits * detectable;
        let defect = bench.defect(hypothesis, size);
        let truth = bench.disturber.try_disturbed(truth, &[defect]).ok()?;
        return Some((truth, Vec::new(), size));
    }
    let tag = &report.tags[&hypothesis.of];
    let sigma = tag.uncertainty_measured? / COVERAGE_FACTOR;
    let sign = if clean.noise.clone().random_bool(0.5) {
        1.0
    } else {
        -1.0
    };
    let bias = sign * (limits * detectable / sigma).max(sigmas);
    // The fault is in sigma at the true value.
    let of = bench.plant.tags.iter().find(|t| t.name == hypothesis.of)?;
    let exact = of
        .unit
        .from_internal(truth.value(&bench.plant, of.quantity).ok()?);
    let unit = of.uncertainty.sigma(exact)?.get();
    let faults = vec![(hypothesis.of.clone(), Fault::Bias(bias))];
    Some((truth.clone(), faults, bias * unit))
}

/// Whether a suspect's group has a hypothesis in it.
pub fn is_in(report: &Report, suspect: usize, hypothesis: &Hypothesis) -> bool {
    let suspect = report.suspects.get(suspect);
    suspect.is_some_and(|s| s.group.iter().any(|m| m.hypothesis == *hypothesis))
}

/// Hypotheses of some causes that can be tested on a clean batch.
pub fn testable(report: &Report, causes: &[Cause]) -> Vec<Hypothesis> {
    let limits = report.limits.iter();
    limits
        .filter(|l| l.detectable.is_some() && causes.contains(&l.hypothesis.cause))
        .map(|l| l.hypothesis.clone())
        .collect()
}

/// Work on every item, on a few threads, answered in order.
pub fn on_threads<T: Sync, R: Send>(items: &[T], work: impl Fn(&T) -> R + Sync) -> Vec<R> {
    let work = &work;
    let mut results: Vec<(usize, R)> = std::thread::scope(|scope| {
        let parts: Vec<_> = (0..THREADS)
            .map(|first| {
                scope.spawn(move || {
                    let own = items.iter().enumerate().skip(first).step_by(THREADS);
                    own.map(|(n, item)| (n, work(item))).collect::<Vec<_>>()
                })
            })
            .collect();
        let joined = parts.into_iter().map(|part| part.join().expect("no panic"));
        joined.flatten().collect()
    });
    results.sort_by_key(|(n, _)| *n);
    results.into_iter().map(|(_, result)| result).collect()
}
