//! What an alarm is called, by machines and by people.

use crate::report::{Cause, Hypothesis};
use serde::{Deserialize, Serialize};
use std::fmt;
use utoipa::ToSchema;

/// What an alarm is about: `suspect bias FT-101`, `imbalance heater-6 energy`,
/// `adjustment FT-101`. Two alarms that stand have different keys.
#[derive(Clone, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize, ToSchema)]
#[serde(transparent)]
pub struct Key(String);

impl Key {
    /// Of a suspect, by a member of its group.
    pub fn suspect(hypothesis: &Hypothesis) -> Self {
        let Hypothesis { cause, of, side } = hypothesis;
        let side = side.iter().map(|side| format!(" {side}"));
        let side: String = side.collect();
        Key(format!("suspect {} {of}{side}", cause_word(*cause)))
    }

    /// Of a balance: `energy`, or `mass` with its side.
    pub fn imbalance(equipment: &str, balance: &str) -> Self {
        Key(format!("imbalance {equipment} {balance}"))
    }

    /// Whether this is of a balance of a piece of equipment.
    pub fn is_balance_of(&self, equipment: &str) -> bool {
        let rest = self.0.strip_prefix("imbalance ");
        let rest = rest.and_then(|rest| rest.strip_prefix(equipment));
        rest.is_some_and(|rest| rest.starts_with(' '))
    }

    /// Of a tag or an assumption.
    pub fn adjustment(name: &str) -> Self {
        Key(format!("adjustment {name}"))
    }

    /// As text.
    pub fn as_str(&self) -> &str {
        &self.0
    }
}

impl fmt::Display for Key {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.0)
    }
}

/// A suspect for people, by its group, the likeliest first. Where the readings
/// cannot tell several apart, the first is not accused alone.
pub(super) fn suspect_title<'a>(group: impl IntoIterator<Item = &'a Hypothesis>) -> String {
    let names: Vec<String> = group.into_iter().map(name).collect();
    match names.as_slice() {
        [] => String::new(),
        [only] => only.clone(),
        [first, second] => format!("{first} or {second}"),
        [first, second, third] => format!("{first}, {second} or {third}"),
        [first, others @ ..] => format!(
            "{first}, or one of {} others that the readings cannot tell apart",
            others.len()
        ),
    }
}

fn name(hypothesis: &Hypothesis) -> String {
    let Hypothesis { cause, of, side } = hypothesis;
    let side = side.iter().map(|side| format!(" ({side})"));
    let side: String = side.collect();
    match cause {
        Cause::Bias => format!("bias of {of}"),
        Cause::Departure => format!("departure of {of}"),
        Cause::Leak => format!("leak out of {of}{side}"),
        Cause::LeakBetween => format!("leak in {of}{side}"),
        Cause::Passing => format!("{of} passes"),
        Cause::HeatLoss => format!("heat loss of {of}"),
    }
}

/// A balance for people.
pub(super) fn imbalance_title(equipment: &str, balance: &str) -> String {
    format!("imbalance of {equipment}, {balance}")
}

/// A tag or an assumption for people.
pub(super) fn adjustment_title(name: &str) -> String {
    format!("adjustment of {name}")
}

/// As in reports.
fn cause_word(cause: Cause) -> &'static str {
    match cause {
        Cause::Bias => "bias",
        Cause::Departure => "departure",
        Cause::Leak => "leak",
        Cause::LeakBetween => "leak-between",
        Cause::Passing => "passing",
        Cause::HeatLoss => "heat-loss",
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn hypothesis(cause: Cause, of: &str, side: Option<&str>) -> Hypothesis {
        Hypothesis {
            cause,
            of: of.to_owned(),
            side: side.map(str::to_owned),
        }
    }

    #[test]
    fn keys() {
        let bias = hypothesis(Cause::Bias, "FT-101", None);
        assert_eq!(Key::suspect(&bias).as_str(), "suspect bias FT-101");
        let leak = hypothesis(Cause::LeakBetween, "heater-6", Some("tube into steam"));
        assert_eq!(
            Key::suspect(&leak).to_string(),
            "suspect leak-between heater-6 tube into steam"
        );
        assert_eq!(
            Key::imbalance("heater-6", "mass steam").as_str(),
            "imbalance heater-6 mass steam"
        );
        assert_eq!(Key::adjustment("FT-101").as_str(), "adjustment FT-101");
    }

    #[test]
    fn titles_name_the_likeliest_and_do_not_hide_the_others() {
        let group = [
            hypothesis(Cause::Bias, "T7", None),
            hypothesis(Cause::HeatLoss, "heater", None),
            hypothesis(Cause::LeakBetween, "heater", Some("tube into steam")),
            hypothesis(Cause::Passing, "drain", None),
        ];
        let titles: Vec<String> = (1..=4).map(|n| suspect_title(&group[..n])).collect();
        assert_eq!(
            titles,
            [
                "bias of T7",
                "bias of T7 or heat loss of heater",
                "bias of T7, heat loss of heater or leak in heater (tube into steam)",
                "bias of T7, or one of 3 others that the readings cannot tell apart",
            ]
        );
    }

    /// The word of a cause is the one that reports write.
    #[test]
    fn causes_are_worded_as_in_reports() {
        for cause in [
            Cause::Bias,
            Cause::Departure,
            Cause::Leak,
            Cause::LeakBetween,
            Cause::Passing,
            Cause::HeatLoss,
        ] {
            assert_eq!(serde_json::to_value(cause).unwrap(), cause_word(cause));
        }
    }
}
