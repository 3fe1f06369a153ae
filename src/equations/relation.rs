//! The laws a plant obeys, each with its exact sparse Jacobian.
//!
//! Three forms serve every kind of equipment: a linear relation; a balance of
//! energy, which is a sum of products of a flow with an enthalpy and of linear
//! terms; and a stream on the saturation line, h - h_sat(p). Signs: what enters
//! is positive, so a residual is what enters less what leaves.

use super::layout::Layout;
use crate::fluid::{self, Saturation};
use crate::plant::{EquipmentId, StreamId};

/// A side of the saturation line.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Side {
    /// Saturated liquid.
    Liquid,
    /// Dry saturated steam.
    Vapour,
}

/// What a relation is, for people and for the report.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Role {
    /// Mass balance of one side of a piece of equipment.
    Mass {
        /// Side, in the words of the plant file's ports.
        side: String,
    },
    /// Energy balance of a piece of equipment.
    Energy,
    /// Any other condition, named in words.
    Condition(&'static str),
    /// A bound (residual >= 0).
    Bound(&'static str),
    /// A bound at the saturation line, whose sign is that of the side that the
    /// stream is taken to be on (see [`super::Mode`]).
    SideOfSaturation,
}

/// Enthalpy that a product of an energy balance carries.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Carried {
    /// Of the stream.
    Stream(StreamId),
    /// Of saturated liquid at the stream's pressure (the stream's own above the
    /// critical pressure).
    SaturatedLiquid(StreamId),
}

/// The mathematical form of a relation.
#[derive(Clone, Debug, PartialEq)]
pub enum Law {
    /// Sum of coefficient times state.
    Linear(Vec<(usize, f64)>),
    /// Sum of sign * flow state * enthalpy, plus linear terms.
    Energy {
        /// (flow state, enthalpy, sign).
        products: Vec<(usize, Carried, f64)>,
        /// (state, coefficient).
        linear: Vec<(usize, f64)>,
    },
    /// sign * (h - h_sat(p)).
    Saturated {
        /// The stream.
        stream: StreamId,
        /// Side of the saturation line.
        side: Side,
        /// +1 or -1 (for bounds).
        sign: f64,
    },
}

/// Saturated states at the pressure of each stream that needs them; `None` for
/// the others and outside the range.
pub type Saturations = [Option<Saturation>];

/// A relation of the plant.
#[derive(Clone, Debug, PartialEq)]
pub struct Relation {
    /// The equipment it belongs to; `None` for bounds of streams.
    pub of: Option<EquipmentId>,
    /// What it is.
    pub role: Role,
    /// Its form.
    pub law: Law,
    /// The states it depends on, without repetition: the row of its Jacobian.
    pub row: Vec<usize>,
}

impl Relation {
    /// A relation with the row of states that its law needs.
    pub fn new(of: Option<EquipmentId>, role: Role, law: Law, layout: &Layout) -> Self {
        let mut row = Vec::new();
        let mut need = |state| {
            if !row.contains(&state) {
                row.push(state);
            }
        };
        match &law {
            Law::Linear(terms) => terms.iter().for_each(|&(j, _)| need(j)),
            Law::Energy { products, linear } => {
                for &(flow, carried, _) in products {
                    need(flow);
                    match carried {
                        Carried::Stream(s) => need(layout.h(s)),
                        Carried::SaturatedLiquid(s) => {
                            need(layout.p(s));
                            need(layout.h(s));
                        }
                    }
                }
                linear.iter().for_each(|&(j, _)| need(j));
            }
            Law::Saturated { stream, .. } => {
                need(layout.p(*stream));
                need(layout.h(*stream));
            }
        }
        Relation { of, role, law, row }
    }

    /// The streams whose saturated states the relation needs.
    pub fn needs_saturation(&self) -> Vec<StreamId> {
        match &self.law {
            Law::Linear(_) => Vec::new(),
            Law::Energy { products, .. } => {
                let carried = products.iter().map(|(_, carried, _)| carried);
                carried
                    .filter_map(|carried| match carried {
                        Carried::Stream(_) => None,
                        Carried::SaturatedLiquid(s) => Some(*s),
                    })
                    .collect()
            }
            Law::Saturated { stream, .. } => vec![*stream],
        }
    }

    /// Residual at `x`; the Jacobian goes into `values`, which stands beside
    /// [`Relation::row`]. `saturations` holds the saturated states at the
    /// pressures of `x` of the streams that need them.
    ///
    /// # Errors
    /// The state to blame, where saturation is asked for outside its range.
    pub fn evaluate(
        &self,
        layout: &Layout,
        x: &[f64],
        saturations: &Saturations,
        values: &mut [f64],
    ) -> Result<f64, usize> {
        values.fill(0.0);
        let mut residual = 0.0;
        let mut add = |state: usize, value: f64| {
            if let Some(slot) = self.row.iter().position(|&j| j == state) {
                values[slot] += value;
            }
        };
        match &self.law {
            Law::Linear(terms) => {
                for &(j, coefficient) in terms {
                    residual += coefficient * x[j];
                    add(j, coefficient);
                }
            }
            Law::Energy { products, linear } => {
                for &(flow, carried, sign) in products {
                    let (h, stream, slope) = carried_enthalpy(carried, layout, x, saturations)?;
                    residual += sign * x[flow] * h;
                    add(flow, sign * h);
                    match slope {
                        None => add(layout.h(stream), sign * x[flow]),
                        Some(h_p) => add(layout.p(stream), sign * x[flow] * h_p),
                    }
                }
                for &(j, coefficient) in linear {
                    residual += coefficient * x[j];
                    add(j, coefficient);
                }
            }
            Law::Saturated { stream, side, sign } => {
                let p = layout.p(*stream);
                let saturation = saturations[stream.0].ok_or(p)?;
                let branch = match side {
                    Side::Liquid => saturation.liquid,
                    Side::Vapour => saturation.vapour,
                };
                residual = sign * (x[layout.h(*stream)] - branch.h);
                add(layout.h(*stream), *sign);
                add(p, -sign * branch.h_p);
            }
        }
        Ok(residual)
    }

    /// A typical size of its terms at `x`, not less than `floor` of the same
    /// unit: what the residual is held against.
    pub fn size(&self, layout: &Layout, x: &[f64], floor: &Floors) -> f64 {
        match &self.law {
            Law::Linear(terms) => {
                let sum = terms.iter().map(|&(j, c)| (c * x[j]).abs()).sum::<f64>();
                sum.max(floor.of(layout, terms[0].0))
            }
            Law::Energy { products, linear } => {
                let carried: f64 = products
                    .iter()
                    .map(|&(flow, carried, _)| {
                        let stream = match carried {
                            Carried::Stream(s) | Carried::SaturatedLiquid(s) => s,
                        };
                        (x[flow] * x[layout.h(stream)]).abs()
                    })
                    .sum();
                let rest: f64 = linear.iter().map(|&(j, c)| (c * x[j]).abs()).sum();
                (carried + rest).max(floor.energy)
            }
            Law::Saturated { .. } => floor.enthalpy,
        }
    }
}

/// Smallest typical sizes by kind of state, for scaling.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Floors {
    /// kg/s.
    pub flow: f64,
    /// MPa.
    pub pressure: f64,
    /// kJ/kg.
    pub enthalpy: f64,
    /// kW.
    pub energy: f64,
}

impl Floors {
    /// The floor for state `j`.
    pub fn of(&self, layout: &Layout, j: usize) -> f64 {
        use super::layout::StateKind;
        match layout.kind(j) {
            StateKind::MassFlow | StateKind::Holdup => self.flow,
            StateKind::Pressure => self.pressure,
            StateKind::Enthalpy => self.enthalpy,
            StateKind::Energy => self.energy,
        }
    }
}

/// Enthalpy carried, the stream it comes from, and its slope by pressure where
/// it depends on pressure instead of on the stream's enthalpy.
fn carried_enthalpy(
    carried: Carried,
    layout: &Layout,
    x: &[f64],
    saturations: &Saturations,
) -> Result<(f64, StreamId, Option<f64>), usize> {
    match carried {
        Carried::SaturatedLiquid(s) if x[layout.p(s)] < fluid::MAX_SATURATION_PRESSURE => {
            let saturation = saturations[s.0].ok_or(layout.p(s))?;
            Ok((saturation.liquid.h, s, Some(saturation.liquid.h_p)))
        }
        Carried::Stream(s) | Carried::SaturatedLiquid(s) => Ok((x[layout.h(s)], s, None)),
    }
}
