//! Equipment in the report: heat, work, power and losses in kW, and what each
//! balance would miss.

use super::compiled::Compiled;
use super::solution::Solution;
use super::streams::report;
use crate::diagnosis::Miss;
use crate::equations::Role;
use crate::plant::{COVERAGE_FACTOR, EquipmentId, Kind};
use crate::report::{EquipmentReport, Imbalance, Imbalances, QuantityReport};
use indexmap::IndexMap;

/// Every piece of equipment of the plant.
pub fn equipment(compiled: &Compiled, solution: &Solution) -> IndexMap<String, EquipmentReport> {
    let equipment = compiled.plant().equipment.iter().enumerate();
    equipment
        .map(|(e, item)| {
            let report = entry(compiled, solution, EquipmentId(e), &item.kind);
            (item.name.clone(), report)
        })
        .collect()
}

fn entry(
    compiled: &Compiled,
    solution: &Solution,
    id: EquipmentId,
    kind: &Kind,
) -> EquipmentReport {
    let own = compiled.system().layout.own[id.0];
    let of_state = |unit: &str, state: Option<usize>| -> Option<QuantityReport> {
        let j = state?;
        let value = solution.x()[j];
        let sigma = solution.uncertainty(&[(j, 1.0)]);
        Some(report(unit, sigma.map(|sigma| (value, sigma))))
    };
    // What nothing states is zero by the plant file, and certain.
    let zero = |unit: &str| Some(report(unit, Some((0.0, 0.0))));
    let loss = of_state("kW", own.loss);
    let holdup = of_state("kg/s", own.holdup);
    EquipmentReport {
        kind: kind.name().to_owned(),
        heat: of_state("kW", own.heat),
        work: of_state("kW", own.work),
        power: of_state("kW", own.power),
        loss: loss.or_else(|| if kind.has_loss() { zero("kW") } else { None }),
        holdup_change: holdup.or_else(|| {
            if kind.has_holdup() {
                zero("kg/s")
            } else {
                None
            }
        }),
        imbalance: imbalances(compiled, solution, id),
    }
}

fn imbalances(compiled: &Compiled, solution: &Solution, id: EquipmentId) -> Imbalances {
    let mut imbalances = Imbalances::default();
    for (k, relation) in compiled.system().relations.iter().enumerate() {
        if relation.of != Some(id) {
            continue;
        }
        match &relation.role {
            Role::Mass { side } => {
                let imbalance = imbalance(solution.miss(k), "kg/s");
                imbalances.mass.insert(side.clone(), imbalance);
            }
            Role::Energy => imbalances.energy = Some(imbalance(solution.miss(k), "kW")),
            Role::Condition(_) | Role::Bound(_) | Role::SideOfSaturation => {}
        }
    }
    imbalances
}

fn imbalance(miss: Option<Miss>, unit: &str) -> Imbalance {
    Imbalance {
        value: miss.map(|miss| miss.value),
        uncertainty: miss.map(|miss| COVERAGE_FACTOR * miss.sigma),
        unit: unit.to_owned(),
        standardised: miss.map(|miss| miss.standardised),
    }
}
