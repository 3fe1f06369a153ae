//! What readings were averaged from, in the report.

use crate::plant::{self, COVERAGE_FACTOR};
use crate::report::{Averaged, Steadiness};

/// Most tags that a remark names.
const NAMED: usize = 10;

/// What a mean was made from.
pub fn in_report(made: &plant::Averaged) -> Averaged {
    let flags = made.flags.iter();
    Averaged {
        samples: made.taken,
        used: made.used,
        covered: made.covered,
        scatter: made.scatter.map(|scatter| COVERAGE_FACTOR * scatter),
        steady: made.steady,
        flags: flags
            .map(|(flag, count)| (flag.name().to_owned(), *count))
            .collect(),
    }
}

/// Whether the plant was steady.
pub fn steadiness(judged: &plant::Steadiness) -> Steadiness {
    Steadiness {
        steady: judged.steady,
        judged: judged.judged,
        unsteady: judged.unsteady.clone(),
    }
}

/// A remark on a plant that was not steady: its balances hold for a state, and
/// what was stored or given up on the way to another one is in none of them.
pub fn transition(judged: Option<&plant::Steadiness>) -> Option<String> {
    let judged = judged.filter(|judged| !judged.steady)?;
    let mut names = judged.unsteady.clone();
    let more = names.len().saturating_sub(NAMED);
    names.truncate(NAMED);
    if more > 0 {
        names.push(format!("{more} more"));
    }
    Some(format!(
        "the plant was in transition: {} of {} tags judged were not steady ({})",
        judged.unsteady.len(),
        judged.judged,
        names.join(", ")
    ))
}
