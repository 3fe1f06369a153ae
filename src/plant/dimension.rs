//! Units: what is written in a plant file, resolved to a factor and an offset.
//!
//! Codes are UCUM (<https://ucum.org/ucum>), case-sensitive, read by the crate
//! `ucum-units`; [`ALIASES`] lists the trade spellings accepted beside it and
//! [`ANSWERS`] those that are answered with what to write instead. A unit is
//! resolved once, to internal = factor * value + offset.

use super::Unit;

/// The quantities that a unit can belong to, each with its internal unit.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Dimension {
    /// kg/s.
    MassFlow,
    /// MPa.
    Pressure,
    /// K, on a scale with a zero point.
    Temperature,
    /// K, as a difference: no offset.
    TemperatureDifference,
    /// kJ/kg.
    SpecificEnthalpy,
    /// kW.
    Power,
    /// 1.
    Fraction,
}

/// Why a text is no unit of a dimension.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct UnitFault {
    /// What is wrong.
    pub what: String,
    /// What to write instead.
    pub mend: String,
}

/// Longest unit that is looked at, in bytes.
const MAX_LENGTH: usize = 64;

/// Trade spellings that UCUM lacks, and the UCUM code that each stands for.
pub const ALIASES: &[(&str, &str)] = &[
    ("klb/h", "10*3.[lb_av]/h"),
    ("lb/h", "[lb_av]/h"),
    ("lb/s", "[lb_av]/s"),
    ("psi", "[psi]"),
    ("inHg", "[in_i'Hg]"),
    ("mmHg", "mm[Hg]"),
    ("inH2O", "[in_i'H2O]"),
    ("mmH2O", "mm[H2O]"),
    ("degC", "Cel"),
    ("°C", "Cel"),
    ("degF", "[degF]"),
    ("°F", "[degF]"),
    ("Btu/lb", "[Btu_IT]/[lb_av]"),
    ("Btu/h", "[Btu_IT]/h"),
    ("MMBtu/h", "10*6.[Btu_IT]/h"),
    ("hp", "[HP]"),
    ("ppm", "[ppm]"),
];

const GAUGE: &str = "with reference = \"gauge\" beside it";
const ABSOLUTE: &str = "with reference = \"absolute\" beside it";

/// Spellings that are not accepted: what each asks for, as (unit, what else).
pub const ANSWERS: &[(&str, &str, &str)] = &[
    ("barg", "bar", GAUGE),
    ("bar(g)", "bar", GAUGE),
    ("bar g", "bar", GAUGE),
    ("mbarg", "mbar", GAUGE),
    ("kpag", "kPa", GAUGE),
    ("kpa(g)", "kPa", GAUGE),
    ("mpag", "MPa", GAUGE),
    ("mpa(g)", "MPa", GAUGE),
    ("psig", "[psi]", GAUGE),
    ("bara", "bar", ABSOLUTE),
    ("bar(a)", "bar", ABSOLUTE),
    ("bar a", "bar", ABSOLUTE),
    ("mbara", "mbar", ABSOLUTE),
    ("kpaa", "kPa", ABSOLUTE),
    ("kpa(a)", "kPa", ABSOLUTE),
    ("mpaa", "MPa", ABSOLUTE),
    ("psia", "[psi]", ABSOLUTE),
    ("ata", "att", ABSOLUTE),
    (
        "torr",
        "mm[Hg]",
        "which differs by three parts in a million",
    ),
    ("mwe", "MW", "as `of` says which power it is"),
    ("mw(e)", "MW", "as `of` says which power it is"),
    ("mwth", "MW", "as `of` says which power it is"),
    ("tph", "t/h", "for tonnes per hour"),
    ("t/hr", "t/h", "for tonnes per hour"),
    ("te/h", "t/h", "for tonnes per hour"),
    ("kg/hr", "kg/h", "for kilograms per hour"),
    ("lb/hr", "lb/h", "for pounds per hour"),
    ("klb/hr", "klb/h", "for thousand pounds per hour"),
    ("kpph", "klb/h", "for thousand pounds per hour"),
    ("pph", "lb/h", "for pounds per hour"),
    ("c", "Cel", "for degrees Celsius"),
    ("f", "[degF]", "for degrees Fahrenheit"),
    ("btu/hr", "Btu/h", "for British thermal units per hour"),
    (
        "mmbtu/hr",
        "MMBtu/h",
        "for million British thermal units per hour",
    ),
    ("percent", "%", "for percent"),
    ("pct", "%", "for percent"),
];

/// Spellings of volume flows, which later versions measure.
const VOLUME_FLOWS: &[&str] = &["Nm3/h", "Sm3/h", "m3/h", "m3/s", "L/s", "L/min", "scfm"];

impl Dimension {
    const ALL: [Dimension; 7] = [
        Dimension::MassFlow,
        Dimension::Pressure,
        Dimension::Temperature,
        Dimension::TemperatureDifference,
        Dimension::SpecificEnthalpy,
        Dimension::Power,
        Dimension::Fraction,
    ];

    /// What is measured in it, for messages.
    pub fn name(self) -> &'static str {
        match self {
            Dimension::MassFlow => "a mass flow",
            Dimension::Pressure => "a pressure",
            Dimension::Temperature => "a temperature",
            Dimension::TemperatureDifference => "a temperature difference",
            Dimension::SpecificEnthalpy => "a specific enthalpy",
            Dimension::Power => "a power",
            Dimension::Fraction => "a fraction",
        }
    }

    /// Units that plants commonly use for it, for messages.
    pub fn common(self) -> &'static [&'static str] {
        match self {
            Dimension::MassFlow => &["kg/s", "t/h", "kg/h", "klb/h"],
            Dimension::Pressure => &["bar", "mbar", "MPa", "kPa", "Pa", "[psi]", "mm[Hg]"],
            Dimension::Temperature | Dimension::TemperatureDifference => &["Cel", "K", "[degF]"],
            Dimension::SpecificEnthalpy => &["kJ/kg", "[Btu_IT]/[lb_av]"],
            Dimension::Power => &["kW", "MW", "W", "[HP]"],
            Dimension::Fraction => &["%", "1"],
        }
    }

    /// Symbol of the internal unit in UCUM.
    pub fn internal(self) -> &'static str {
        match self {
            Dimension::MassFlow => "kg/s",
            Dimension::Pressure => "MPa",
            Dimension::Temperature | Dimension::TemperatureDifference => "K",
            Dimension::SpecificEnthalpy => "kJ/kg",
            Dimension::Power => "kW",
            Dimension::Fraction => "1",
        }
    }

    /// The dimension of differences and uncertainties.
    pub fn of_difference(self) -> Dimension {
        match self {
            Dimension::Temperature => Dimension::TemperatureDifference,
            other => other,
        }
    }

    /// Resolves `text`, as written in a plant file, to a unit of this dimension.
    pub fn unit(self, text: &str) -> Result<Unit, UnitFault> {
        if text.is_empty() {
            return Err(self.fault(format!("{} needs a unit", self.name()), None));
        }
        if text.len() > MAX_LENGTH {
            return Err(self.fault("the unit is too long to be one".into(), None));
        }
        let code = ALIASES.iter().find(|(alias, _)| *alias == text);
        let code = code.map_or(text, |(_, code)| *code);
        let Some(unit) = analyse(code) else {
            return Err(self.unknown(text));
        };
        let internal = self.measure();
        // UCUM counts things (mol, [pi]) as pure numbers: no fraction is
        // measured in a unit above 1.
        let is_count = self == Dimension::Fraction && unit.factor > 1.0;
        if unit.dimension != internal.dimension || !unit.is_linear || is_count {
            return Err(self.misfit(text, &unit));
        }
        let offset = match self {
            Dimension::Temperature => unit.offset / internal.factor,
            _ => 0.0,
        };
        Ok(Unit {
            symbol: text.to_owned(),
            factor: unit.factor / internal.factor,
            offset,
        })
    }

    fn measure(self) -> Analysed {
        let known = analyse(self.internal());
        // The internal units are seven literals, all tested.
        known.unwrap_or(Analysed {
            dimension: [0; 7],
            factor: 1.0,
            offset: 0.0,
            is_linear: true,
        })
    }

    fn unknown(self, text: &str) -> UnitFault {
        if let Some(answer) = answered(text) {
            return answer;
        }
        if VOLUME_FLOWS.contains(&text) {
            return volume_flow(text);
        }
        let what = format!("`{text}` is no UCUM unit");
        let fold = |s: &str| s.to_lowercase().replace([' ', '[', ']'], "");
        let same = self.common().iter().find(|c| fold(c) == fold(text));
        self.fault(what, same.copied())
    }

    fn misfit(self, text: &str, unit: &Analysed) -> UnitFault {
        if let Some(answer) = answered(text) {
            return answer;
        }
        if VOLUME_FLOWS.contains(&text) {
            return volume_flow(text);
        }
        let fits = Self::ALL
            .iter()
            .find(|d| unit.is_linear && **d != self && d.measure().dimension == unit.dimension);
        let what = match fits {
            Some(other) => format!("`{text}` is {}, not {}", unit_of(*other), unit_of(self)),
            None => format!("`{text}` is not {}", unit_of(self)),
        };
        self.fault(what, None)
    }

    fn fault(self, what: String, meant: Option<&str>) -> UnitFault {
        let mend = match meant {
            Some(unit) => format!("write `{unit}`"),
            None => format!("write one that fits, such as {}", list(self.common())),
        };
        UnitFault { what, mend }
    }
}

/// A unit as the crate sees it, in UCUM's base units.
struct Analysed {
    dimension: [i8; 7],
    factor: f64,
    offset: f64,
    is_linear: bool,
}

fn analyse(code: &str) -> Option<Analysed> {
    let found = ucum::analyze(code).ok()?;
    let usable = found.factor.is_finite() && found.factor > 0.0 && found.offset.is_finite();
    usable.then_some(Analysed {
        dimension: found.dimension.0,
        factor: found.factor,
        offset: found.offset,
        // Of the special units only temperature scales are linear, and they
        // have an offset; the crate calls a scale inside a product special too
        // and gives it none.
        is_linear: !found.is_special || found.offset != 0.0,
    })
}

fn answered(text: &str) -> Option<UnitFault> {
    let folded = text.to_lowercase();
    let (_, unit, rest) = ANSWERS.iter().find(|(from, _, _)| *from == folded)?;
    Some(UnitFault {
        what: format!("`{text}` is no UCUM unit"),
        mend: format!("write `{unit}`, {rest}"),
    })
}

fn volume_flow(text: &str) -> UnitFault {
    UnitFault {
        what: format!("`{text}` is a volume flow, which is not available yet"),
        mend: "measure a mass flow, in kg/s or t/h".into(),
    }
}

fn unit_of(dimension: Dimension) -> String {
    let name = dimension.name();
    format!("a unit of {}", name.trim_start_matches("a "))
}

fn list(units: &[&str]) -> String {
    let quoted: Vec<String> = units.iter().map(|u| format!("`{u}`")).collect();
    quoted.join(", ")
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    /// Exact by definition (NIST SP 811, appendix B; UCUM's own conventional
    /// values for columns of mercury): pound 0.45359237 kg, pound-force over
    /// square inch with g = 9.80665 m/s2 and inch 0.0254 m, Btu_IT/lb = 2.326
    /// kJ/kg, atmosphere 101325 Pa.
    const POUND: f64 = 0.45359237;
    const PSI: f64 = POUND * 9.80665 / (0.0254 * 0.0254) * 1e-6;
    const FAHRENHEIT: f64 = 5.0 / 9.0;

    fn exact() -> Vec<(Dimension, &'static str, f64, f64)> {
        use Dimension::*;
        vec![
            (MassFlow, "kg/s", 1.0, 0.0),
            (MassFlow, "t/h", 1.0 / 3.6, 0.0),
            (MassFlow, "kg/h", 1.0 / 3600.0, 0.0),
            (MassFlow, "g/s", 1e-3, 0.0),
            (MassFlow, "t/d", 1.0 / 86.4, 0.0),
            (MassFlow, "[lb_av]/h", POUND / 3600.0, 0.0),
            (MassFlow, "lb/h", POUND / 3600.0, 0.0),
            (MassFlow, "klb/h", POUND / 3.6, 0.0),
            (MassFlow, "lb/s", POUND, 0.0),
            (Pressure, "MPa", 1.0, 0.0),
            (Pressure, "bar", 0.1, 0.0),
            (Pressure, "mbar", 1e-4, 0.0),
            (Pressure, "kPa", 1e-3, 0.0),
            (Pressure, "hPa", 1e-4, 0.0),
            (Pressure, "Pa", 1e-6, 0.0),
            (Pressure, "[psi]", PSI, 0.0),
            (Pressure, "psi", PSI, 0.0),
            (Pressure, "mm[Hg]", 133.322e-6, 0.0),
            (Pressure, "mmHg", 133.322e-6, 0.0),
            (Pressure, "inHg", 133.322e-6 * 25.4, 0.0),
            (Pressure, "m[H2O]", 9.80665e-3, 0.0),
            (Pressure, "mmH2O", 9.80665e-6, 0.0),
            (Pressure, "inH2O", 9.80665e-6 * 25.4, 0.0),
            (Pressure, "atm", 0.101325, 0.0),
            (Pressure, "att", 0.0980665, 0.0),
            (Pressure, "kgf/cm2", 0.0980665, 0.0),
            (Temperature, "K", 1.0, 0.0),
            (Temperature, "Cel", 1.0, 273.15),
            (Temperature, "\u{b0}C", 1.0, 273.15),
            (Temperature, "[degF]", FAHRENHEIT, 459.67 * FAHRENHEIT),
            (Temperature, "degF", FAHRENHEIT, 459.67 * FAHRENHEIT),
            (TemperatureDifference, "K", 1.0, 0.0),
            (TemperatureDifference, "Cel", 1.0, 0.0),
            (TemperatureDifference, "[degF]", FAHRENHEIT, 0.0),
            (SpecificEnthalpy, "kJ/kg", 1.0, 0.0),
            (SpecificEnthalpy, "J/g", 1.0, 0.0),
            (SpecificEnthalpy, "MJ/kg", 1000.0, 0.0),
            (SpecificEnthalpy, "[Btu_IT]/[lb_av]", 2.326, 0.0),
            (SpecificEnthalpy, "Btu/lb", 2.326, 0.0),
            (SpecificEnthalpy, "kcal_IT/kg", 4.1868, 0.0),
            (Power, "kW", 1.0, 0.0),
            (Power, "MW", 1000.0, 0.0),
            (Power, "W", 1e-3, 0.0),
            (Power, "GJ/h", 1000.0 / 3.6, 0.0),
            (Power, "Btu/h", 2.326 * POUND / 3600.0, 0.0),
            (Power, "MMBtu/h", 2.326e6 * POUND / 3600.0, 0.0),
            (Power, "hp", 550.0 * 0.3048 * POUND * 9.80665 * 1e-3, 0.0),
            (Fraction, "1", 1.0, 0.0),
            (Fraction, "%", 0.01, 0.0),
            (Fraction, "ppm", 1e-6, 0.0),
            (Fraction, "g/kg", 1e-3, 0.0),
        ]
    }

    #[test]
    fn factors_of_the_units_that_plants_use() {
        for (dimension, text, factor, offset) in exact() {
            let unit = dimension.unit(text).unwrap();
            assert_eq!(unit.symbol, text);
            assert!(
                (unit.factor / factor - 1.0).abs() < 1e-15 * 4.0,
                "{text}: {}",
                unit.factor
            );
            assert!(
                (unit.offset - offset).abs() < 1e-12,
                "{text}: {}",
                unit.offset
            );
        }
    }

    #[test]
    fn every_alias_and_answer_leads_to_a_unit() {
        let fits = |code: &str| Dimension::ALL.iter().any(|d| d.unit(code).is_ok());
        for (alias, code) in ALIASES {
            assert!(fits(alias) && fits(code), "{alias}");
        }
        for (from, to, _) in ANSWERS {
            assert!(fits(to), "{to}");
            assert!(!fits(from), "{from}");
            assert_eq!(*from, from.to_lowercase(), "looked up in lower case");
        }
        for dimension in Dimension::ALL {
            assert!(dimension.unit(dimension.internal()).is_ok());
            assert!(dimension.common().iter().all(|c| dimension.unit(c).is_ok()));
        }
    }

    #[test]
    fn what_is_no_unit_of_the_dimension() {
        for text in [
            "bar", "kW", "Cel", "dB", "[pH]", "Cel/s", "", "T/h", "((((", "1/0", "x",
        ] {
            assert!(Dimension::MassFlow.unit(text).is_err(), "{text}");
        }
        for text in ["mol", "[iU]", "dB", "[pH]", "bar", "rad", "10*2"] {
            assert!(Dimension::Fraction.unit(text).is_err(), "{text}");
        }
        for text in ["Cel.m/m", "2.Cel", "[degF].1", "K2"] {
            assert!(Dimension::Temperature.unit(text).is_err(), "{text}");
        }
        let fault = Dimension::Pressure.unit("psig").unwrap_err();
        assert!(
            fault.mend.contains("`[psi]`, with reference = \"gauge\""),
            "{fault:?}"
        );
        let fault = Dimension::Power.unit("KW").unwrap_err();
        assert_eq!(fault.mend, "write `kW`");
    }

    proptest! {
        #[test]
        fn values_come_back(i in 0..exact().len(), x in -1e6..1e6f64) {
            let (dimension, text, ..) = exact()[i];
            let unit = dimension.unit(text).unwrap();
            let scale = x.abs() + unit.offset / unit.factor;
            let back = unit.from_internal(unit.to_internal(x));
            prop_assert!((back - x).abs() <= 1e-14 * scale, "{text}: {x} {back}");
            let back = unit.difference_from_internal(unit.difference_to_internal(x));
            prop_assert!((back - x).abs() <= 1e-15 * x.abs(), "{text}: {x} {back}");
        }

        #[test]
        fn no_text_panics(text in "\\PC{0,80}") {
            for dimension in Dimension::ALL {
                if let Ok(unit) = dimension.unit(&text) {
                    prop_assert!(unit.factor.is_finite() && unit.factor > 0.0);
                }
            }
        }
    }
}
