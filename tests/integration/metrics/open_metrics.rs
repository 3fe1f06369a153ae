//! A strict reader of the OpenMetrics text format 1.0, written from its
//! specification: it refuses what the specification forbids, so that what it
//! reads a scraper reads too.
//!
//! Held to: `# EOF` ends the text; a family's lines stand together under one
//! `# TYPE`; names of samples are the family's with the suffix of its type;
//! counters are finite and not negative; labels are not repeated, neither are
//! samples; buckets of a histogram increase to `+Inf`, which is its `_count`.

use std::collections::{BTreeMap, HashSet};

/// A value with its name and labels.
#[derive(Clone, Debug, PartialEq)]
pub struct Sample {
    pub name: String,
    pub labels: BTreeMap<String, String>,
    pub value: f64,
}

/// A family.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Family {
    pub kind: String,
    pub samples: Vec<Sample>,
}

/// What a text holds.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Metrics(pub BTreeMap<String, Family>);

impl Metrics {
    /// Sum of the samples of a name whose labels are, among others, these.
    pub fn sum(&self, name: &str, labels: &[(&str, &str)]) -> f64 {
        self.samples(name, labels).map(|sample| sample.value).sum()
    }

    /// The value of the only sample of a name.
    pub fn value(&self, name: &str) -> f64 {
        let all: Vec<&Sample> = self.samples(name, &[]).collect();
        assert_eq!(all.len(), 1, "{name}: {all:?}");
        all[0].value
    }

    pub fn samples<'m>(
        &'m self,
        name: &'m str,
        labels: &'m [(&'m str, &'m str)],
    ) -> impl Iterator<Item = &'m Sample> {
        let all = self.0.values().flat_map(|family| &family.samples);
        all.filter(move |sample| {
            let has = |(key, value): &(&str, &str)| {
                sample.labels.get(*key).is_some_and(|have| have == value)
            };
            sample.name == name && labels.iter().all(has)
        })
    }
}

/// Reads a text.
///
/// # Errors
///
/// Says which line breaks which rule.
pub fn read(text: &str) -> Result<Metrics, String> {
    let body = text
        .strip_suffix("# EOF\n")
        .ok_or("does not end with # EOF")?;
    let mut metrics = Metrics::default();
    let mut open: Option<String> = None;
    let mut described = HashSet::new();
    for line in body.lines() {
        let fail = |what: &str| format!("{what}: {line}");
        if let Some(rest) = line.strip_prefix("# ") {
            let mut parts = rest.splitn(3, ' ');
            let (keyword, name) = (parts.next(), parts.next());
            let name = name.ok_or_else(|| fail("no name"))?;
            let content = parts.next().ok_or_else(|| fail("nothing said"))?;
            if open.as_deref() != Some(name) {
                if metrics.0.contains_key(name) {
                    return Err(fail("a family in two places"));
                }
                metrics.0.insert(name.to_owned(), Family::default());
                open = Some(name.to_owned());
            }
            let keyword = keyword.unwrap_or_default();
            if !described.insert(format!("{keyword} {name}")) {
                return Err(fail("said twice"));
            }
            let family = metrics.0.get_mut(name).ok_or_else(|| fail("no family"))?;
            if !family.samples.is_empty() {
                return Err(fail("said after samples"));
            }
            match keyword {
                "TYPE" => family.kind = content.to_owned(),
                "HELP" => {}
                "UNIT" if name.ends_with(&format!("_{content}")) => {}
                _ => return Err(fail("no such word, or a unit that is not in the name")),
            }
            continue;
        }
        let sample = sample(line).ok_or_else(|| fail("no sample"))?;
        let name = open.as_deref().ok_or_else(|| fail("outside a family"))?;
        let family = metrics.0.get_mut(name).ok_or_else(|| fail("no family"))?;
        let suffix = sample.name.strip_prefix(name);
        let suffix = suffix.ok_or_else(|| fail("of another family"))?;
        let fits = match family.kind.as_str() {
            "counter" => suffix == "_total" && sample.value.is_finite() && sample.value >= 0.0,
            "gauge" => suffix.is_empty(),
            "info" => suffix == "_info" && sample.value == 1.0,
            "histogram" => ["_bucket", "_sum", "_count"].contains(&suffix),
            _ => false,
        };
        if !fits {
            return Err(fail("does not fit its type"));
        }
        let same = |other: &Sample| other.name == sample.name && other.labels == sample.labels;
        if family.samples.iter().any(same) {
            return Err(fail("a sample twice"));
        }
        family.samples.push(sample);
    }
    for (name, family) in &metrics.0 {
        if family.kind == "histogram" {
            histogram(name, &family.samples)?;
        }
    }
    Ok(metrics)
}

fn sample(line: &str) -> Option<Sample> {
    let name_end = line.find(|c: char| !(c.is_ascii_alphanumeric() || c == '_' || c == ':'))?;
    let (name, mut rest) = line.split_at(name_end);
    if name.is_empty() || name.starts_with(|c: char| c.is_ascii_digit()) {
        return None;
    }
    let mut labels = BTreeMap::new();
    if let Some(inner) = rest.strip_prefix('{') {
        rest = inner;
        while !rest.starts_with('}') {
            let (key, after) = rest.split_once("=\"")?;
            let (value, after) = quoted(after)?;
            if key.is_empty() || labels.insert(key.to_owned(), value).is_some() {
                return None;
            }
            rest = after.strip_prefix(',').unwrap_or(after);
            if after.len() == rest.len() && !rest.starts_with('}') {
                return None;
            }
        }
        rest = &rest[1..];
    }
    let value = rest.strip_prefix(' ')?;
    let value = match value {
        "+Inf" => f64::INFINITY,
        "NaN" => f64::NAN,
        number => number.parse().ok()?,
    };
    Some(Sample {
        name: name.to_owned(),
        labels,
        value,
    })
}

/// A quoted text up to its closing quote, and what follows.
fn quoted(text: &str) -> Option<(String, &str)> {
    let mut value = String::new();
    let mut characters = text.char_indices();
    while let Some((at, character)) = characters.next() {
        match character {
            '"' => return Some((value, &text[at + 1..])),
            '\\' => match characters.next()?.1 {
                'n' => value.push('\n'),
                escaped @ ('"' | '\\') => value.push(escaped),
                _ => return None,
            },
            other => value.push(other),
        }
    }
    None
}

fn histogram(name: &str, samples: &[Sample]) -> Result<(), String> {
    let mut series: BTreeMap<String, Vec<(f64, f64)>> = BTreeMap::new();
    for sample in samples.iter().filter(|s| s.name.ends_with("_bucket")) {
        let mut labels = sample.labels.clone();
        let bound = labels.remove("le").ok_or(format!("{name} without le"))?;
        let bound = match bound.as_str() {
            "+Inf" => f64::INFINITY,
            number => number.parse().map_err(|_| format!("{name}: le {number}"))?,
        };
        let buckets = series.entry(format!("{labels:?}")).or_default();
        buckets.push((bound, sample.value));
    }
    for (labels, buckets) in series {
        let increase = |pair: &[(f64, f64)]| pair[0].0 < pair[1].0 && pair[0].1 <= pair[1].1;
        if !buckets.windows(2).all(increase) {
            return Err(format!("{name}{labels}: buckets do not increase"));
        }
        let count = samples.iter().find(|sample| {
            sample.name.ends_with("_count") && format!("{:?}", sample.labels) == labels
        });
        let last = buckets.last().map(|(bound, count)| (*bound, *count));
        if last != count.map(|count| (f64::INFINITY, count.value)) {
            return Err(format!("{name}{labels}: +Inf is not the count"));
        }
    }
    Ok(())
}

#[test]
fn what_the_format_forbids_is_refused() {
    let good = "# HELP a A.\n# TYPE a counter\na_total{x=\"1\\\"\"} 1\n# HELP h H.\n\
                # TYPE h histogram\nh_sum 3\nh_count 2\nh_bucket{le=\"1.0\"} 1\n\
                h_bucket{le=\"+Inf\"} 2\n# EOF\n";
    let metrics = read(good).expect("good");
    assert_eq!(metrics.sum("a_total", &[("x", "1\"")]), 1.0);
    for (from, to) in [
        ("# EOF\n", ""),
        ("a_total{x=\"1\\\"\"} 1\n", "a{x=\"1\"} 1\n"),
        ("a_total{x=\"1\\\"\"} 1\n", "a_total -1\n"),
        ("a_total{x=\"1\\\"\"} 1\n", "a_total{x=\"1\",x=\"2\"} 1\n"),
        ("a_total{x=\"1\\\"\"} 1\n", "a_total 1\na_total 1\n"),
        ("a_total{x=\"1\\\"\"} 1\n", "b_total 1\n"),
        ("h_count 2\n", "h_count 3\n"),
        ("h_bucket{le=\"1.0\"} 1\n", "h_bucket{le=\"1.0\"} 4\n"),
        ("# TYPE h histogram\n", "# TYPE h gauge\n"),
    ] {
        let bad = good.replace(from, to);
        assert_ne!(bad, good);
        assert!(read(&bad).is_err(), "{bad}");
    }
}
