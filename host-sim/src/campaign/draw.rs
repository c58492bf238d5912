//! What a field may be set to: a value, or a distribution from which each run draws.

use super::path;
use crate::front_end::{Purpose, Random};
use toml::{Table, Value};

/// Most redraws of a normal distribution with limits, before its nearest limit is taken.
const MOST_REDRAWS: u32 = 1000;

/// One distribution.
#[derive(Clone, Debug, PartialEq)]
enum Kind {
    /// Always this.
    Fixed(Value),
    /// Not there.
    Removed,
    /// Between two numbers, all equally likely.
    Uniform(f64, f64),
    /// Between two numbers, all ratios equally likely.
    LogUniform(f64, f64),
    /// Mean and standard deviation.
    Normal(f64, f64),
    /// One of some values with their weights, summed up.
    Choice(Vec<(f64, Alternative)>),
}

/// One value of a choice.
#[derive(Clone, Debug, PartialEq)]
enum Alternative {
    Value(Value),
    Bundle(Bundle),
}

/// Several fields that are set together, with a name to show.
#[derive(Clone, Debug, PartialEq)]
pub struct Bundle {
    /// What tables and results call it.
    pub label: String,
    /// The fields.
    pub fields: Vec<Draw>,
}

/// A field, or the name of a bundle, with what it is set to.
#[derive(Clone, Debug, PartialEq)]
pub struct Draw {
    /// Dotted path of the field, or the bundle's name.
    pub name: String,
    /// Further fields that get the same value.
    also: Vec<String>,
    kind: Kind,
    /// Rounded to whole numbers?
    round: bool,
    /// Nothing outside of these.
    within: Option<(f64, f64)>,
}

/// One field set, or taken away.
#[derive(Clone, Debug, PartialEq)]
pub struct Assignment {
    /// Dotted path.
    pub path: String,
    /// Its value; `None` takes it away.
    pub value: Option<Value>,
}

/// What is wrong with a distribution, and the remedy.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct DrawError {
    /// What is wrong.
    pub what: String,
    /// What to do about it.
    pub remedy: String,
}

fn error<T>(what: impl Into<String>, remedy: impl Into<String>) -> Result<T, DrawError> {
    Err(DrawError {
        what: what.into(),
        remedy: remedy.into(),
    })
}

const KINDS: [&str; 5] = ["uniform", "log_uniform", "normal", "choice", "remove"];
const OPTIONS: [&str; 4] = ["also", "round", "within", "weights"];

/// Is this table a distribution? Any other is a value.
fn is_distribution(table: &Table) -> bool {
    table.keys().any(|key| KINDS.contains(&key.as_str()))
}

/// A number, whole or not.
#[must_use]
pub fn number(value: &Value) -> Option<f64> {
    match value {
        Value::Float(number) => Some(*number),
        Value::Integer(number) => Some(*number as f64),
        _ => None,
    }
}

fn pair(name: &str, value: &Value) -> Result<(f64, f64), DrawError> {
    let numbers: Option<Vec<f64>> = value.as_array().and_then(|list| list.iter().map(number).collect());
    match numbers.as_deref() {
        Some(&[first, second]) if first.is_finite() && second.is_finite() => Ok((first, second)),
        _ => error(
            format!("{name} needs two finite numbers"),
            format!("write {name} = [1.0, 2.0]"),
        ),
    }
}

fn range(name: &str, value: &Value) -> Result<(f64, f64), DrawError> {
    let (low, high) = pair(name, value)?;
    if low < high {
        return Ok((low, high));
    }
    error(
        format!("{name} = [{low}, {high}] is an empty range"),
        "give the smaller number first",
    )
}

/// Fields that get the same value.
///
/// # Errors
/// Not a list of paths.
pub fn also(value: Option<&Value>) -> Result<Vec<String>, DrawError> {
    let Some(value) = value else { return Ok(Vec::new()) };
    let list: Option<Vec<String>> = value
        .as_array()
        .and_then(|list| list.iter().map(|entry| entry.as_str().map(str::to_string)).collect());
    match list {
        Some(list) if list.iter().all(|path| path::is_field(path)) => Ok(list),
        _ => error(
            "also is no list of fields",
            "write also = [\"setup.material.velocity_m_s\"]",
        ),
    }
}

impl Bundle {
    /// A table of fields; `number` names it if it has no label.
    ///
    /// # Errors
    /// Not a table, or a field with an impossible distribution.
    pub fn parse(value: &Value, number: usize) -> Result<Self, DrawError> {
        let Some(table) = value.as_table() else {
            return error(
                "a name that is no field needs tables of fields",
                "begin the name with scene., setup. or shot., or write tables like { label = \"thin\", \"scene.wall.thickness_mm\" = 2.0 }",
            );
        };
        let mut label = (number + 1).to_string();
        let mut fields = Vec::new();
        for (name, value) in table {
            if name == "label" {
                match value.as_str() {
                    Some(text) if !text.is_empty() && text.len() <= 60 && !text.contains(char::is_control) => {
                        label = text.to_string();
                    }
                    _ => return error("label is no short text", "write label = \"thin\""),
                }
            } else {
                fields.push(Draw::parse(name, value)?);
            }
        }
        Ok(Self { label, fields })
    }
}

impl Draw {
    /// Reads what a field is set to.
    ///
    /// # Errors
    /// An impossible distribution, or one that the name of a bundle cannot have.
    pub fn parse(name: &str, value: &Value) -> Result<Self, DrawError> {
        let mut draw = Self {
            name: name.to_string(),
            also: Vec::new(),
            kind: Kind::Fixed(value.clone()),
            round: false,
            within: None,
        };
        let table = value.as_table().filter(|table| is_distribution(table));
        let Some(table) = table else {
            if path::is_field(name) {
                return Ok(draw);
            }
            return error(
                format!("{name} is no field and no choice of fields"),
                "begin it with scene., setup. or shot., or give { choice = [{ .. }, { .. }] }",
            );
        };
        for key in table.keys() {
            if !KINDS.contains(&key.as_str()) && !OPTIONS.contains(&key.as_str()) {
                let known = KINDS.iter().chain(&OPTIONS).copied();
                let near = crate::spelling::nearest(key, known, 1);
                let remedy = match near.first() {
                    Some(near) => format!("did you mean {near}?"),
                    None => format!("known here: {}, {}", KINDS.join(", "), OPTIONS.join(", ")),
                };
                return error(format!("unknown key {key}"), remedy);
            }
        }
        let mut kinds = KINDS.iter().filter_map(|kind| Some((*kind, table.get(*kind)?)));
        let first = kinds.next();
        if kinds.next().is_some() {
            return error("two distributions in one", "keep one of them");
        }
        draw.also = also(table.get("also"))?;
        draw.round = match table.get("round") {
            None => false,
            Some(Value::Boolean(round)) => *round,
            Some(_) => return error("round is neither true nor false", "write round = true"),
        };
        draw.within = table.get("within").map(|value| range("within", value)).transpose()?;
        if let Some((kind, value)) = first {
            draw.kind = parse_kind(name, kind, value, table)?;
        }
        if !path::is_field(name) && !matches!(draw.kind, Kind::Choice(_)) {
            return error(
                format!("{name} is no field"),
                "begin it with scene., setup. or shot., or give a choice of tables of fields",
            );
        }
        Ok(draw)
    }

    /// Does it differ from run to run?
    #[must_use]
    pub fn is_random(&self) -> bool {
        !matches!(self.kind, Kind::Fixed(_) | Kind::Removed)
    }

    /// Every field that it may set.
    pub fn paths(&self) -> Vec<&str> {
        let mut paths: Vec<&str> = self.also.iter().map(String::as_str).collect();
        if path::is_field(&self.name) {
            paths.push(&self.name);
        }
        if let Kind::Choice(list) = &self.kind {
            for (_, alternative) in list {
                if let Alternative::Bundle(bundle) = alternative {
                    paths.extend(bundle.fields.iter().flat_map(Self::paths));
                }
            }
        }
        paths
    }

    /// Names of what is random in it, for the columns of the results.
    pub fn columns(&self, columns: &mut Vec<String>) {
        if self.is_random() && !columns.contains(&self.name) {
            columns.push(self.name.clone());
        }
        if let Kind::Choice(list) = &self.kind {
            for (_, alternative) in list {
                if let Alternative::Bundle(bundle) = alternative {
                    bundle.fields.iter().for_each(|field| field.columns(columns));
                }
            }
        }
    }

    /// Draws for one run, and notes what was drawn.
    ///
    /// Every field has a sequence of its own, made of seed, run and name: another draw in the campaign
    /// leaves it as it was.
    pub fn draw(&self, seed: u64, run: u64, assign: &mut Vec<Assignment>, drawn: &mut Vec<(String, String)>) {
        let mut random = Random::new(seed ^ hash(&self.name), Purpose::Variation, run);
        let value = match &self.kind {
            Kind::Fixed(value) => Some(value.clone()),
            Kind::Removed => None,
            Kind::Uniform(low, high) => Some(self.finish(low + (high - low) * random.uniform())),
            Kind::LogUniform(low, high) => {
                let ratio = libm::log(high / low);
                Some(self.finish(low * libm::exp(ratio * random.uniform())))
            }
            Kind::Normal(mean, deviation) => {
                let mut value = mean + deviation * random.normal();
                if let Some((low, high)) = self.within {
                    let mut tries = 0;
                    while !(low..=high).contains(&value) && tries < MOST_REDRAWS {
                        value = mean + deviation * random.normal();
                        tries += 1;
                    }
                }
                Some(self.finish(value))
            }
            Kind::Choice(list) => {
                let total = list.last().map_or(0.0, |(sum, _)| *sum);
                let at = total * random.uniform();
                let chosen = list.iter().find(|(sum, _)| at < *sum).or(list.last());
                match chosen {
                    Some((_, Alternative::Value(value))) => Some(value.clone()),
                    Some((_, Alternative::Bundle(bundle))) => {
                        drawn.push((self.name.clone(), bundle.label.clone()));
                        for field in &bundle.fields {
                            field.draw(seed, run, assign, drawn);
                        }
                        return;
                    }
                    None => return,
                }
            }
        };
        if self.is_random() {
            drawn.push((self.name.clone(), value.as_ref().map_or_else(String::new, shown)));
        }
        for path in self.also.iter().chain([&self.name]) {
            assign.push(Assignment {
                path: path.clone(),
                value: value.clone(),
            });
        }
    }

    fn finish(&self, value: f64) -> Value {
        let value = self.within.map_or(value, |(low, high)| value.clamp(low, high));
        if self.round {
            // A float becomes the nearest whole number that there is; beyond, the largest.
            Value::Integer(libm::round(value) as i64)
        } else {
            Value::Float(value)
        }
    }
}

fn parse_kind(name: &str, kind: &str, value: &Value, table: &Table) -> Result<Kind, DrawError> {
    if kind != "choice" && table.contains_key("weights") {
        return error("weights belong to a choice", "remove them");
    }
    match kind {
        "uniform" => range(kind, value).map(|(low, high)| Kind::Uniform(low, high)),
        "log_uniform" => match range(kind, value)? {
            (low, _) if low <= 0.0 => error(
                format!("log_uniform cannot start at {low}"),
                "give numbers above 0, or take uniform",
            ),
            (low, high) => Ok(Kind::LogUniform(low, high)),
        },
        "normal" => {
            let (mean, deviation) = pair(kind, value)?;
            if deviation < 0.0 {
                return error(
                    format!("normal has a standard deviation of {deviation}"),
                    "write normal = [mean, standard deviation]",
                );
            }
            if let Some((low, high)) = table.get("within").map(|value| range("within", value)).transpose()?
                && (mean + 4.0 * deviation < low || mean - 4.0 * deviation > high)
            {
                return error(
                    "normal hardly ever falls within its limits",
                    "move the mean between the limits",
                );
            }
            Ok(Kind::Normal(mean, deviation))
        }
        "choice" => choice(name, value, table),
        _ if value == &Value::Boolean(true) => Ok(Kind::Removed),
        _ => error("remove is not true", "write { remove = true }"),
    }
}

fn choice(name: &str, value: &Value, table: &Table) -> Result<Kind, DrawError> {
    let values = match value.as_array() {
        Some(values) if !values.is_empty() => values,
        _ => return error("choice needs a list of values", "write choice = [1.0, 2.0]"),
    };
    let weights: Vec<f64> = match table.get("weights") {
        None => vec![1.0; values.len()],
        Some(weights) => {
            let list = weights.as_array().map(Vec::as_slice).unwrap_or_default();
            let weights: Vec<f64> = list.iter().filter_map(number).collect();
            let sound = weights.iter().all(|weight| weight.is_finite() && *weight >= 0.0);
            if weights.len() != values.len() || !sound || weights.iter().sum::<f64>() <= 0.0 {
                return error(
                    format!("weights do not fit a choice of {}", values.len()),
                    "give one number of at least 0 for each value",
                );
            }
            weights
        }
    };
    let mut sum = 0.0;
    let mut list = Vec::with_capacity(values.len());
    for (number, (value, weight)) in values.iter().zip(weights).enumerate() {
        sum += weight;
        let alternative = if path::is_field(name) {
            Alternative::Value(value.clone())
        } else {
            Alternative::Bundle(Bundle::parse(value, number)?)
        };
        list.push((sum, alternative));
    }
    Ok(Kind::Choice(list))
}

/// A value as results show it.
#[must_use]
pub fn shown(value: &Value) -> String {
    match value {
        Value::String(text) => text.clone(),
        other => other.to_string(),
    }
}

/// FNV-1a, 64 bits (Fowler, Noll, Vo; the constants are those of draft-eastlake-fnv).
#[must_use]
pub fn hash(text: &str) -> u64 {
    text.bytes().fold(0xcbf2_9ce4_8422_2325, |hash, byte| {
        (hash ^ u64::from(byte)).wrapping_mul(0x0000_0100_0000_01b3)
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn parsed(name: &str, text: &str) -> Result<Draw, DrawError> {
        let table: Table = format!("x = {text}").parse().unwrap();
        Draw::parse(name, &table["x"])
    }

    fn draws(text: &str, runs: u64) -> Vec<f64> {
        let draw = parsed("scene.wall.thickness_mm", text).unwrap();
        (0..runs)
            .map(|run| {
                let (mut assign, mut drawn) = (Vec::new(), Vec::new());
                draw.draw(7, run, &mut assign, &mut drawn);
                assert_eq!(drawn.len(), 1);
                number(assign[0].value.as_ref().unwrap()).unwrap()
            })
            .collect()
    }

    /// Means and deviations of the distributions: (a + b) / 2 and (b - a) / sqrt 12; (b - a) / ln(b / a) for the
    /// log-uniform (its density is 1 / (x ln(b / a))).
    #[test]
    fn distributions_have_their_moments() {
        let moments = |values: &[f64]| {
            let mean = values.iter().sum::<f64>() / values.len() as f64;
            let square = values.iter().map(|v| (v - mean) * (v - mean)).sum::<f64>() / values.len() as f64;
            (mean, square.sqrt())
        };
        let (mean, deviation) = moments(&draws("{ uniform = [2, 6.0] }", 20_000));
        assert!((mean - 4.0).abs() < 0.03 && (deviation - 4.0 / 12f64.sqrt()).abs() < 0.02);
        let (mean, _) = moments(&draws("{ log_uniform = [1.0, 100.0] }", 20_000));
        assert!((mean - 99.0 / 100f64.ln()).abs() < 0.6, "{mean}");
        let (mean, deviation) = moments(&draws("{ normal = [10.0, 0.5] }", 20_000));
        assert!((mean - 10.0).abs() < 0.015 && (deviation - 0.5).abs() < 0.01);
        let cut = draws("{ normal = [10.0, 0.5], within = [9.5, 10.5] }", 2000);
        assert!(cut.iter().all(|value| (9.5..=10.5).contains(value)));
        let whole = draws("{ uniform = [0.0, 3.0], round = true }", 200);
        assert!(whole.iter().all(|value| value.fract() == 0.0));
        let (mean, _) = moments(&draws("{ choice = [1.0, 2.0], weights = [3, 1] }", 20_000));
        assert!((mean - 1.25).abs() < 0.01, "{mean}");
    }

    #[test]
    fn a_bundle_sets_its_fields_together() {
        let draw = parsed(
            "probe",
            "{ choice = [{ label = \"low\", \"scene.probe.centre_frequency_mhz\" = 2.0, \"scene.wall.thickness_mm\" = { uniform = [8.0, 9.0], also = [\"setup.a.b\"] } }, { \"scene.delay_line\" = { remove = true } }] }",
        )
        .unwrap();
        let mut seen = [false; 2];
        for run in 0..20 {
            let (mut assign, mut drawn) = (Vec::new(), Vec::new());
            draw.draw(1, run, &mut assign, &mut drawn);
            if drawn[0].1 == "low" {
                seen[0] = true;
                assert_eq!(assign.len(), 3);
                assert_eq!(assign[1].value, assign[2].value);
            } else {
                seen[1] = true;
                assert_eq!(
                    assign,
                    [Assignment {
                        path: "scene.delay_line".into(),
                        value: None
                    }]
                );
            }
        }
        assert_eq!(seen, [true; 2]);
        let mut columns = Vec::new();
        draw.columns(&mut columns);
        assert_eq!(columns, ["probe", "scene.wall.thickness_mm"]);
        assert_eq!(draw.paths().len(), 4);
    }

    #[test]
    fn impossible_distributions_are_refused() {
        for (text, word) in [
            ("{ uniform = [2, 1] }", "empty range"),
            ("{ uniform = [1] }", "two finite numbers"),
            ("{ uniform = [1, nan] }", "two finite numbers"),
            ("{ uniform = [1, inf] }", "two finite numbers"),
            ("{ log_uniform = [0, 1] }", "cannot start at 0"),
            ("{ normal = [1, -1] }", "standard deviation of -1"),
            ("{ normal = [1, 0.1], within = [5, 6] }", "hardly ever"),
            ("{ choice = [] }", "list of values"),
            ("{ choice = [1, 2], weights = [1] }", "weights"),
            ("{ choice = [1, 2], weights = [0, 0] }", "weights"),
            ("{ uniform = [1, 2], weights = [1] }", "weights"),
            ("{ uniform = [1, 2], normal = [1, 2] }", "two distributions"),
            ("{ uniform = [1, 2], alos = [\"setup.a\"] }", "unknown key alos"),
            ("{ uniform = [1, 2], also = \"setup.a\" }", "also"),
            ("{ remove = false }", "remove"),
        ] {
            let error = parsed("scene.wall.thickness_mm", text).unwrap_err();
            assert!(error.what.contains(word), "{text}: {}", error.what);
            assert!(!error.remedy.is_empty());
        }
        assert!(parsed("wall", "3").is_err());
        assert!(parsed("wall", "{ uniform = [1, 2] }").is_err());
        assert!(parsed("wall", "{ choice = [1, 2] }").is_err());
    }
}
