//! Which suspect of a report belongs to which alarm of earlier batches.
//!
//! They belong together where their groups share a member. One suspect belongs
//! to one alarm and the other way round; where there is a choice, the alarm whose
//! key is that of the suspect's likeliest member comes first, alarms come before
//! what is not yet an alarm, and the older before the newer.

use super::sight::Sighted;
use super::words::Key;
use crate::report::Hypothesis;

/// What a suspect may belong to.
pub(super) struct Known<'a> {
    pub key: &'a Key,
    pub members: &'a [Hypothesis],
    /// An alarm that is normal belongs to nothing.
    pub is_open: bool,
}

/// For each suspect its place among the known, the first of which are alarms
/// and the others not yet.
pub(super) fn claims(
    suspects: &[Sighted<'_>],
    alarms: &[Known<'_>],
    candidates: &[Known<'_>],
) -> Vec<Option<usize>> {
    let mut claims = vec![None; suspects.len()];
    let mut is_taken = vec![false; alarms.len() + candidates.len()];
    for (known, first) in [(alarms, 0), (candidates, alarms.len())] {
        for fits in [same, shares] {
            for (claim, suspect) in claims.iter_mut().zip(suspects) {
                if claim.is_some() {
                    continue;
                }
                let mut places = (first..).zip(known);
                let place = places
                    .find(|(at, known)| known.is_open && !is_taken[*at] && fits(suspect, known));
                if let Some((at, _)) = place {
                    is_taken[at] = true;
                    *claim = Some(at);
                }
            }
        }
    }
    claims
}

fn same(suspect: &Sighted<'_>, known: &Known<'_>) -> bool {
    suspect.key == *known.key
}

fn shares(suspect: &Sighted<'_>, known: &Known<'_>) -> bool {
    let mut group = suspect.group.iter();
    group.any(|accused| known.members.contains(&accused.hypothesis))
}
