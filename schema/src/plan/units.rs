//! Units: reading UCUM codes, and converting between them.
//!
//! Invariants: codes are case-sensitive; equal codes convert identically; units of different dimensions, and arbitrary
//! units of different names, never convert; a factor is kept as an exact fraction and divided once, so that the
//! number handed out is the nearest one that a double holds.
//!
//! Codes, prefixes and definitions follow "The Unified Code for Units of Measure" (Schadow & McDonald), compared line
//! by line with its machine-readable table, `ucum-essence.xml`, version 2.2 of 2024-06-17; each customary unit is
//! written here in the terms in which that table defines it. The factors that follow from them are tested against NIST Special Publication 811 (2008), Appendix B.
//! Two deviations: the mole is a dimension of its own here, as in the SI, and not the number 6.02e23, so that an
//! amount of substance never turns into a count; and constants of nature are those of the SI, exact since 2019, and of
//! CODATA 2022.

use std::collections::{BTreeMap, HashMap};
use std::sync::LazyLock;

use super::model::Affine;

/// Longest code that is looked at, and deepest nesting of its brackets: codes of real units are far shorter.
const LONGEST: usize = 200;
const DEEPEST: usize = 16;

/// Whether `code` is a sound UCUM code.
pub fn is_ucum(code: &str) -> bool {
    parse(code).is_some()
}

/// How a number in `from` becomes one in `to`; `None` when they are not of the same kind.
pub fn convert(from: &str, to: &str) -> Option<Affine> {
    let (source, target) = (parse(from)?, parse(to)?);
    if from == to {
        return Some(Affine { times: 1.0, plus: 0.0 });
    }
    match (source.scale(), target.scale()) {
        (None, None) => {
            let ratio = (source.dimension == target.dimension).then(|| source.factor.divide(target.factor))??;
            held(Affine { times: ratio.nearest(), plus: 0.0 })
        }
        (from_zero, to_zero) if source.is_temperature() && target.is_temperature() => {
            let ratio = source.factor.divide(target.factor)?;
            let shift = ratio.times(from_zero.unwrap_or(Fraction::ZERO))?.minus(to_zero.unwrap_or(Fraction::ZERO))?;
            held(Affine { times: ratio.nearest(), plus: shift.nearest() })
        }
        _ => None,
    }
}

/// A factor too large or too small for a double is no conversion.
fn held(affine: Affine) -> Option<Affine> {
    (affine.times.is_normal() && affine.plus.is_finite()).then_some(affine)
}

/// Conversions that have been asked for once: for columns of units, where few pairs come again and again.
#[derive(Debug, Clone, Default)]
pub struct Conversions(HashMap<String, HashMap<String, Option<Affine>>>);

impl Conversions {
    /// As [`convert`].
    pub fn convert(&mut self, from: &str, to: &str) -> Option<Affine> {
        // A column full of different texts must not fill the memory.
        const MOST: usize = 500;
        if let Some(known) = self.0.get(to).and_then(|pairs| pairs.get(from)) {
            return *known;
        }
        let found = convert(from, to);
        if self.0.values().map(HashMap::len).sum::<usize>() < MOST {
            self.0.entry(to.to_owned()).or_default().insert(from.to_owned(), found);
        }
        found
    }
}

/// The UCUM code that was probably meant by a unit as people write it; `None` for what is a code already, and for what
/// no guess comes near.
pub fn meant(text: &str) -> Option<String> {
    let text = text.trim();
    if is_ucum(text) {
        return None;
    }
    let plain: String = text.chars().filter_map(plainer).collect();
    let spoken = |text: &str| {
        let lower = text.to_lowercase();
        SPOKEN.iter().find(|(spoken, _)| *spoken == lower).map(|(_, code)| (*code).to_owned())
    };
    let common = |text: &str| COMMON.iter().find(|code| code.eq_ignore_ascii_case(text)).map(|code| (*code).to_owned());
    // By its parts: "lbs/day" is what "lbs" and "day" are.
    let known = |part: &str| if is_ucum(part) { Some(part.to_owned()) } else { spoken(part).or_else(|| common(part)) };
    let parts = || {
        let parts: Option<Vec<String>> = plain.split('/').map(known).collect();
        parts.map(|parts| parts.join("/")).filter(|code| is_ucum(code))
    };
    spoken(text).or_else(|| common(&plain)).or_else(parts)
}

/// A character as UCUM writes it, where people use another.
fn plainer(c: char) -> Option<char> {
    match c {
        '·' | '⋅' | '*' => Some('.'),
        '²' => Some('2'),
        '³' => Some('3'),
        'µ' | 'μ' => Some('u'),
        ' ' | '^' => None,
        other => Some(other),
    }
}

/// Codes whose case people get wrong.
const COMMON: &[&str] = &[
    "kg",
    "g",
    "mg",
    "ug",
    "ng",
    "m",
    "cm",
    "mm",
    "km",
    "um",
    "s",
    "ms",
    "min",
    "h",
    "d",
    "L",
    "mL",
    "uL",
    "dL",
    "N",
    "kN",
    "kgf",
    "Pa",
    "hPa",
    "kPa",
    "MPa",
    "bar",
    "mbar",
    "J",
    "kJ",
    "cal",
    "kcal",
    "W",
    "kW",
    "V",
    "mV",
    "uV",
    "A",
    "mA",
    "Hz",
    "kHz",
    "Ohm",
    "K",
    "Cel",
    "m/s",
    "km/h",
    "mol",
    "mmol",
    "umol",
    "mol/L",
    "mmol/L",
    "umol/L",
    "nmol/L",
    "pmol/L",
    "g/L",
    "g/dL",
    "mg/dL",
    "mg/L",
    "ug/L",
    "ng/mL",
    "pg/mL",
    "U/L",
    "mm[Hg]",
    "cm[H2O]",
    "[degF]",
    "[lb_av]",
    "[oz_av]",
    "[in_i]",
    "[ft_i]",
    "[mi_i]",
    "[psi]",
    "[lbf_av]",
    "N.m",
    "L/min",
    "mL/min",
    "mL/min/kg",
    "dB",
    "deg",
];

/// Why a unit does not convert to another, in words: what each of them is. `None` when it does, or when one of them is
/// no code.
pub fn apart(from: &str, to: &str) -> Option<String> {
    if convert(from, to).is_some() {
        return None;
    }
    let (one, other) = (parse(from)?, parse(to)?);
    let (one, other) = (one.kind(), other.kind());
    let words = match (one.as_str(), other.as_str()) {
        (MASS_IN, AMOUNT_IN) | (AMOUNT_IN, MASS_IN) => {
            format!("one is {one}, the other {other}, and the factor depends on the substance")
        }
        (MASS, FORCE) => format!("one is {one}, the other {other}; a device that shows force in kilograms means kgf"),
        _ if one == other => format!("both are {one}, but not of the same kind"),
        _ => format!("one is {one}, the other {other}"),
    };
    Some(words)
}

const MASS: &str = "a mass";
const FORCE: &str = "a force";
const MASS_IN: &str = "a mass in a volume";
const AMOUNT_IN: &str = "an amount of substance in a volume";

/// What people call a quantity: powers of base units, by their codes.
const KINDS: &[(&[(&str, i32)], &str)] = &[
    (&[], "a plain number"),
    (&[("g", 1)], MASS),
    (&[("m", 1)], "a length"),
    (&[("s", 1)], "a time"),
    (&[("K", 1)], "a temperature"),
    (&[("mol", 1)], "an amount of substance"),
    (&[("A", 1)], "a current"),
    (&[("rad", 1)], "an angle"),
    (&[("m", 2)], "an area"),
    (&[("m", 3)], "a volume"),
    (&[("s", -1)], "a rate"),
    (&[("m", 1), ("s", -1)], "a speed"),
    (&[("m", 1), ("s", -2)], "an acceleration"),
    (&[("m", 3), ("s", -1)], "a flow"),
    (&[("g", 1), ("m", 1), ("s", -2)], FORCE),
    (&[("g", 1), ("m", -1), ("s", -2)], "a pressure"),
    (&[("g", 1), ("m", 2), ("s", -2)], "an energy"),
    (&[("g", 1), ("m", 2), ("s", -3)], "a power"),
    (&[("A", -1), ("g", 1), ("m", 2), ("s", -3)], "a voltage"),
    (&[("A", -2), ("g", 1), ("m", 2), ("s", -3)], "a resistance"),
    (&[("g", 1), ("m", -3)], MASS_IN),
    (&[("m", -3), ("mol", 1)], AMOUNT_IN),
    (&[("m", -3)], "a count in a volume"),
    (&[("g", 1), ("m", -2)], "a mass on an area"),
];

/// Common ways of writing units that are no UCUM codes, in lower case, and the codes.
const SPOKEN: &[(&str, &str)] = &[
    ("°c", "Cel"),
    ("degc", "Cel"),
    ("celsius", "Cel"),
    ("°f", "[degF]"),
    ("degf", "[degF]"),
    ("fahrenheit", "[degF]"),
    ("mmhg", "mm[Hg]"),
    ("cmh2o", "cm[H2O]"),
    ("bpm", "/min"),
    ("beats/min", "/min"),
    ("sec", "s"),
    ("secs", "s"),
    ("seconds", "s"),
    ("mins", "min"),
    ("minutes", "min"),
    ("hr", "h"),
    ("hours", "h"),
    ("days", "d"),
    ("weeks", "wk"),
    ("years", "a"),
    ("months", "mo"),
    ("kgs", "kg"),
    ("kilogram", "kg"),
    ("kilograms", "kg"),
    ("newton", "N"),
    ("newtons", "N"),
    ("day", "d"),
    ("hour", "h"),
    ("minute", "min"),
    ("second", "s"),
    ("week", "wk"),
    ("month", "mo"),
    ("year", "a"),
    ("feet", "[ft_i]"),
    ("inches", "[in_i]"),
    ("pounds", "[lb_av]"),
    ("kg-force", "kgf"),
    ("lb", "[lb_av]"),
    ("lbs", "[lb_av]"),
    ("oz", "[oz_av]"),
    ("in", "[in_i]"),
    ("inch", "[in_i]"),
    ("ft", "[ft_i]"),
    ("yd", "[yd_i]"),
    ("mi", "[mi_i]"),
    ("mph", "[mi_i]/h"),
    ("kph", "km/h"),
    ("kmh", "km/h"),
    ("lbf", "[lbf_av]"),
    ("kp", "kgf"),
    ("psi", "[psi]"),
    ("kcal", "kcal"),
    ("µg", "ug"),
    ("µg/l", "ug/L"),
    ("µm", "um"),
    ("µs", "us"),
    ("µv", "uV"),
    ("µl", "uL"),
    ("µmol/l", "umol/L"),
    ("ohm", "Ohm"),
    ("ohms", "Ohm"),
    ("ω", "Ohm"),
    ("kω", "kOhm"),
    ("°", "deg"),
    ("degrees", "deg"),
    ("percent", "%"),
    ("ppm", "[ppm]"),
    ("iu", "[IU]"),
    ("iu/l", "[IU]/L"),
    ("mm²", "mm2"),
    ("cm²", "cm2"),
    ("m²", "m2"),
    ("m/s²", "m/s2"),
    ("kg/m²", "kg/m2"),
    ("count", "{count}"),
    ("counts", "{count}"),
    ("score", "{score}"),
    ("points", "{score}"),
    ("steps", "{steps}"),
    ("", "1"),
    ("none", "1"),
    ("rpm", "{rev}/min"),
    ("db", "dB"),
    ("ph", "[pH]"),
];

// ---- exact fractions ----

/// `sign * num / den * 10^ten`, with `num` and `den` free of common factors and of tens, and a power of π besides.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
struct Fraction {
    negative: bool,
    num: u128,
    den: u128,
    ten: i32,
    pi: i32,
}

impl Fraction {
    const ZERO: Self = Self { negative: false, num: 0, den: 1, ten: 0, pi: 0 };
    const ONE: Self = Self { negative: false, num: 1, den: 1, ten: 0, pi: 0 };

    /// From a decimal such as `6.02214076e23`.
    fn decimal(text: &str) -> Option<Self> {
        let (digits, exponent) = text.split_once('e').unwrap_or((text, "0"));
        let (whole, part) = digits.split_once('.').unwrap_or((digits, ""));
        let num = format!("{whole}{part}").parse().ok()?;
        let ten = exponent.parse::<i32>().ok()?.checked_sub(i32::try_from(part.len()).ok()?)?;
        Some(Self { num, ten, ..Self::ONE }.reduced())
    }

    fn reduced(mut self) -> Self {
        if self.num == 0 {
            return Self::ZERO;
        }
        let common = gcd(self.num, self.den);
        self.num /= common;
        self.den /= common;
        while self.num.is_multiple_of(10) {
            self.num /= 10;
            self.ten += 1;
        }
        while self.den.is_multiple_of(10) {
            self.den /= 10;
            self.ten -= 1;
        }
        self
    }

    fn times(self, other: Self) -> Option<Self> {
        // Crosswise first, so that the products stay small.
        let (a, b) = (gcd(self.num, other.den).max(1), gcd(other.num, self.den).max(1));
        Some(
            Self {
                negative: self.negative != other.negative,
                num: (self.num / a).checked_mul(other.num / b)?,
                den: (self.den / b).checked_mul(other.den / a)?,
                ten: self.ten.checked_add(other.ten)?,
                pi: self.pi.checked_add(other.pi)?,
            }
            .reduced(),
        )
    }

    fn divide(self, other: Self) -> Option<Self> {
        if other.num == 0 {
            return None;
        }
        let turned = Self { num: other.den, den: other.num, ten: other.ten.checked_neg()?, pi: -other.pi, ..other };
        self.times(turned)
    }

    fn power(self, exponent: i32) -> Option<Self> {
        let base = if exponent < 0 { Self::ONE.divide(self)? } else { self };
        (0..exponent.unsigned_abs()).try_fold(Self::ONE, |product, _| product.times(base))
    }

    fn minus(self, other: Self) -> Option<Self> {
        if other.num == 0 {
            return Some(self);
        }
        let ten = self.ten.min(other.ten);
        let scaled = |it: &Self| {
            let lifted = 10_i128.checked_pow(u32::try_from(it.ten - ten).ok()?)?;
            let num = i128::try_from(it.num).ok()?.checked_mul(lifted)?;
            Some(if it.negative { -num } else { num })
        };
        let (left, right) = (scaled(&self)?, scaled(&other)?);
        let (left_den, right_den) = (i128::try_from(self.den).ok()?, i128::try_from(other.den).ok()?);
        let num = left.checked_mul(right_den)?.checked_sub(right.checked_mul(left_den)?)?;
        let den = self.den.checked_mul(other.den)?;
        Some(Self { negative: num < 0, num: num.unsigned_abs(), den, ten, pi: self.pi }.reduced())
    }

    /// The nearest double: the quotient is written out in decimals, further than a double reaches, and read back.
    fn nearest(self) -> f64 {
        if self.den > u128::MAX / 10 {
            let rough = self.num as f64 / self.den as f64 * 10_f64.powi(self.ten);
            return if self.negative { -rough } else { rough } * std::f64::consts::PI.powi(self.pi);
        }
        let mut digits = (self.num / self.den).to_string();
        let mut rest = self.num % self.den;
        let mut ten = self.ten;
        while rest != 0 && digits.trim_start_matches('0').len() < 40 {
            let lifted = rest * 10;
            digits.push_str(&(lifted / self.den).to_string());
            rest = lifted % self.den;
            ten -= 1;
        }
        let sign = if self.negative { "-" } else { "" };
        let number: f64 = format!("{sign}{digits}e{ten}").parse().unwrap_or(f64::NAN);
        if self.pi == 0 { number } else { number * std::f64::consts::PI.powi(self.pi) }
    }
}

fn gcd(a: u128, b: u128) -> u128 {
    if b == 0 { a } else { gcd(b, a % b) }
}

// ---- units ----

/// A unit: its size in base units, and the powers of these.
#[derive(Debug, Clone, PartialEq)]
struct Unit {
    factor: Fraction,
    /// Base units, and arbitrary units under their own code.
    dimension: BTreeMap<&'static str, i32>,
    /// For a temperature scale: what lies between its zero and absolute zero, in its own degrees.
    zero: Option<Fraction>,
}

impl Unit {
    fn number(factor: Fraction) -> Self {
        Self { factor, dimension: BTreeMap::new(), zero: None }
    }

    fn scale(&self) -> Option<Fraction> {
        self.zero
    }

    /// What people call it.
    fn kind(&self) -> String {
        let powers: Vec<(&str, i32)> = self.dimension.iter().map(|(base, power)| (*base, *power)).collect();
        let known = KINDS.iter().find(|(kind, _)| *kind == powers.as_slice()).map(|(_, name)| (*name).to_owned());
        let arbitrary = || {
            let base = |code: &str| matches!(code, "m" | "s" | "g" | "A" | "K" | "cd" | "mol" | "rad");
            powers
                .iter()
                .find(|(code, _)| !base(code))
                .map(|(code, _)| format!("in {code}, which converts to nothing else"))
        };
        known.or_else(arbitrary).unwrap_or_else(|| {
            let parts: Vec<String> = powers.iter().map(|(base, power)| format!("{base}{power}")).collect();
            format!("{} in base units", parts.join("."))
        })
    }

    fn is_temperature(&self) -> bool {
        self.dimension.len() == 1 && self.dimension.get("K") == Some(&1)
    }

    /// A scale inside a product is a mere size of its degree, as in `Cel/h`.
    fn times(mut self, other: &Self) -> Option<Self> {
        self.factor = self.factor.times(other.factor)?;
        for (base, power) in &other.dimension {
            let sum = self.dimension.entry(base).or_insert(0);
            *sum = sum.checked_add(*power)?;
        }
        self.dimension.retain(|_, power| *power != 0);
        self.zero = None;
        Some(self)
    }

    fn power(&self, exponent: i32) -> Option<Self> {
        if exponent == 1 {
            return Some(self.clone());
        }
        let mut dimension = BTreeMap::new();
        for (base, power) in &self.dimension {
            dimension.insert(*base, power.checked_mul(exponent)?);
        }
        dimension.retain(|_, power| *power != 0);
        Some(Self { factor: self.factor.power(exponent)?, dimension, zero: None })
    }
}

/// Reads a whole code.
fn parse(code: &str) -> Option<Unit> {
    if code.is_empty() || code.len() > LONGEST || !code.bytes().all(|byte| (33..=126).contains(&byte)) {
        return None;
    }
    let mut rest = code;
    let unit = term(&mut rest, 0)?;
    rest.is_empty().then_some(unit)
}

/// Components between points and strokes; a leading stroke inverts the first.
fn term(rest: &mut &str, depth: usize) -> Option<Unit> {
    if depth > DEEPEST {
        return None;
    }
    let mut unit = Unit::number(Fraction::ONE);
    let mut inverse = take(rest, '/');
    loop {
        let part = component(rest, depth)?;
        unit = unit_times(unit, &part, inverse)?;
        inverse = if take(rest, '.') {
            false
        } else if take(rest, '/') {
            true
        } else {
            return Some(unit);
        };
    }
}

/// Keeps the scale of a temperature that stands alone.
fn unit_times(unit: Unit, part: &Unit, inverse: bool) -> Option<Unit> {
    let alone = unit.dimension.is_empty() && unit.factor == Fraction::ONE && !inverse;
    if alone { Some(part.clone()) } else { unit.times(&part.power(if inverse { -1 } else { 1 })?) }
}

fn take(rest: &mut &str, wanted: char) -> bool {
    match rest.strip_prefix(wanted) {
        Some(after) => {
            *rest = after;
            true
        }
        None => false,
    }
}

/// A bracketed term, a number, or an atom with its exponent; each may carry an annotation, which means nothing.
fn component(rest: &mut &str, depth: usize) -> Option<Unit> {
    let unit = if take(rest, '(') {
        let inner = term(rest, depth + 1)?;
        take(rest, ')').then_some(inner)?
    } else if rest.starts_with('{') {
        annotation(rest)?;
        return Some(Unit::number(Fraction::ONE));
    } else if rest.starts_with(|c: char| c.is_ascii_digit()) && !rest.starts_with("10*") && !rest.starts_with("10^") {
        let end = rest.find(|c: char| !c.is_ascii_digit()).unwrap_or(rest.len());
        let (digits, after) = rest.split_at(end);
        *rest = after;
        Unit::number(Fraction::decimal(digits).filter(|number| number.num > 0)?)
    } else {
        let name = symbol(rest)?;
        let exponent = exponent(rest)?;
        atom(name, 0)?.power(exponent)?
    };
    if rest.starts_with('{') {
        annotation(rest)?;
    }
    Some(unit)
}

fn annotation(rest: &mut &str) -> Option<()> {
    let end = rest.find('}')?;
    let inside = rest.get(1..end)?;
    *rest = rest.get(end + 1..)?;
    (!inside.is_empty() && !inside.contains('{')).then_some(())
}

/// The letters and brackets of an atom with its prefix.
fn symbol<'a>(rest: &mut &'a str) -> Option<&'a str> {
    let text: &'a str = rest;
    let mut inside = false;
    let mut end = if text.starts_with("10*") || text.starts_with("10^") { 3 } else { 0 };
    if end == 0 {
        end = text.len();
        for (at, c) in text.char_indices() {
            match c {
                '[' => inside = true,
                ']' => inside = false,
                _ if inside => {}
                '.' | '/' | '(' | ')' | '{' | '}' | '+' | '-' | '0'..='9' => {
                    end = at;
                    break;
                }
                _ => {}
            }
        }
    }
    *rest = &text[end..];
    (end > 0 && !inside).then(|| &text[..end])
}

/// The exponent after an atom: 1 when there is none.
fn exponent(rest: &mut &str) -> Option<i32> {
    let signed = usize::from(rest.starts_with(['+', '-']));
    let end = rest[signed..].find(|c: char| !c.is_ascii_digit()).map_or(rest.len(), |at| at + signed);
    if end == 0 {
        return Some(1);
    }
    let (digits, after) = rest.split_at(end);
    let power: i32 = digits.parse().ok()?;
    *rest = after;
    (power != 0 && power.abs() <= 60).then_some(power)
}

/// An atom, or a prefix and a metric atom. `depth` bounds definitions by definitions.
fn atom(name: &str, depth: usize) -> Option<Unit> {
    if let Some(row) = BY_CODE.get(name) {
        return row.unit(depth);
    }
    PREFIXES.iter().find_map(|(prefix, ten)| {
        let row = BY_CODE.get(name.strip_prefix(prefix)?).filter(|row| row.metric)?;
        let mut unit = row.unit(depth)?;
        let scale = Fraction { ten: *ten, ..Fraction::ONE };
        unit.factor = unit.factor.times(scale)?;
        unit.zero = match unit.zero {
            Some(zero) => Some(zero.divide(scale)?),
            None => None,
        };
        Some(unit)
    })
}

static BY_CODE: LazyLock<HashMap<&str, &Atom>> = LazyLock::new(|| ATOMS.iter().map(|row| (row.code, row)).collect());

/// One row of the table of atoms.
struct Atom {
    code: &'static str,
    metric: bool,
    definition: Definition,
}

enum Definition {
    /// A dimension of its own: base units, and arbitrary units and levels, which convert into nothing else.
    Own,
    /// So many of another unit.
    Of(&'static str, &'static str),
    /// π of another unit times so many.
    PiOf(&'static str, &'static str),
    /// A temperature scale: its degree in kelvin as a fraction, and absolute zero below its own zero.
    Scale(u128, u128, &'static str),
}

impl Atom {
    fn unit(&self, depth: usize) -> Option<Unit> {
        if depth > DEEPEST {
            return None;
        }
        match self.definition {
            Definition::Own => {
                Some(Unit { factor: Fraction::ONE, dimension: BTreeMap::from([(self.code, 1)]), zero: None })
            }
            Definition::Of(number, unit) => {
                let mut rest = unit;
                Unit::number(Fraction::decimal(number)?).times(&term(&mut rest, depth + 1)?)
            }
            Definition::PiOf(number, unit) => {
                let mut rest = unit;
                let pi = Fraction { pi: 1, ..Fraction::decimal(number)? };
                Unit::number(pi).times(&term(&mut rest, depth + 1)?)
            }
            Definition::Scale(num, den, zero) => Some(Unit {
                factor: Fraction { num, den, ..Fraction::ONE }.reduced(),
                dimension: BTreeMap::from([("K", 1)]),
                zero: Some(Fraction::decimal(zero)?),
            }),
        }
    }
}

const fn own(code: &'static str, metric: bool) -> Atom {
    Atom { code, metric, definition: Definition::Own }
}

const fn of(code: &'static str, metric: bool, number: &'static str, unit: &'static str) -> Atom {
    Atom { code, metric, definition: Definition::Of(number, unit) }
}

/// Longer prefixes first: `da` before `d`. UCUM 2.2, without the binary ones.
const PREFIXES: &[(&str, i32)] = &[
    ("da", 1),
    ("Q", 30),
    ("R", 27),
    ("Y", 24),
    ("Z", 21),
    ("E", 18),
    ("P", 15),
    ("T", 12),
    ("G", 9),
    ("M", 6),
    ("k", 3),
    ("h", 2),
    ("d", -1),
    ("c", -2),
    ("m", -3),
    ("u", -6),
    ("n", -9),
    ("p", -12),
    ("f", -15),
    ("a", -18),
    ("z", -21),
    ("y", -24),
    ("r", -27),
    ("q", -30),
];

/// Atoms with their definitions as in UCUM 2.2.
const ATOMS: &[Atom] = &[
    // base units
    own("m", true),
    own("s", true),
    own("g", true),
    own("A", true),
    own("K", true),
    own("cd", true),
    own("mol", true),
    own("rad", true),
    // pure numbers
    of("10*", false, "10", "{1}"),
    of("10^", false, "10", "{1}"),
    of("%", false, "0.01", "{1}"),
    of("[ppth]", false, "1e-3", "{1}"),
    of("[ppm]", false, "1e-6", "{1}"),
    of("[ppb]", false, "1e-9", "{1}"),
    of("[pptr]", false, "1e-12", "{1}"),
    Atom { code: "[pi]", metric: false, definition: Definition::PiOf("1", "{1}") },
    // units of the SI
    of("sr", true, "1", "rad2"),
    of("Hz", true, "1", "s-1"),
    of("N", true, "1", "kg.m/s2"),
    of("Pa", true, "1", "N/m2"),
    of("J", true, "1", "N.m"),
    of("W", true, "1", "J/s"),
    of("V", true, "1", "W/A"),
    of("C", true, "1", "A.s"),
    of("F", true, "1", "C/V"),
    of("Ohm", true, "1", "V/A"),
    of("S", true, "1", "A/V"),
    of("Wb", true, "1", "V.s"),
    of("T", true, "1", "Wb/m2"),
    of("H", true, "1", "Wb/A"),
    of("lm", true, "1", "cd.sr"),
    of("lx", true, "1", "lm/m2"),
    of("Bq", true, "1", "s-1"),
    of("Gy", true, "1", "J/kg"),
    of("Sv", true, "1", "J/kg"),
    of("kat", true, "1", "mol/s"),
    Atom { code: "Cel", metric: true, definition: Definition::Scale(1, 1, "273.15") },
    Atom { code: "[degF]", metric: false, definition: Definition::Scale(5, 9, "459.67") },
    Atom { code: "[degRe]", metric: false, definition: Definition::Scale(5, 4, "218.52") },
    Atom { code: "[degR]", metric: false, definition: Definition::Scale(5, 9, "0") },
    // other units from international use
    of("l", true, "1", "dm3"),
    of("L", true, "1", "dm3"),
    of("ar", true, "100", "m2"),
    of("min", false, "60", "s"),
    of("h", false, "60", "min"),
    of("d", false, "24", "h"),
    of("a_t", false, "365.24219", "d"),
    of("a_j", false, "365.25", "d"),
    of("a_g", false, "365.2425", "d"),
    of("a", false, "1", "a_j"),
    of("wk", false, "7", "d"),
    of("mo_s", false, "29.53059", "d"),
    of("mo_j", false, "30.4375", "d"),
    of("mo_g", false, "30.436875", "d"),
    of("mo", false, "1", "mo_j"),
    of("t", true, "1e3", "kg"),
    of("bar", true, "1e5", "Pa"),
    of("u", true, "1.66053906892e-24", "g"),
    of("eV", true, "1.602176634e-19", "J"),
    of("AU", false, "149597.870691", "Mm"),
    of("pc", true, "3.085678e16", "m"),
    Atom { code: "deg", metric: false, definition: Definition::PiOf("2", "rad/360") },
    of("gon", false, "0.9", "deg"),
    of("'", false, "1", "deg/60"),
    of("''", false, "1", "'/60"),
    Atom { code: "circ", metric: false, definition: Definition::PiOf("2", "rad") },
    Atom { code: "sph", metric: false, definition: Definition::PiOf("4", "sr") },
    // natural units
    of("[c]", true, "299792458", "m/s"),
    of("[h]", true, "6.62607015e-34", "J.s"),
    of("[k]", true, "1.380649e-23", "J/K"),
    of("[e]", true, "1.602176634e-19", "C"),
    of("[m_e]", true, "9.1093837139e-31", "kg"),
    of("[m_p]", true, "1.67262192595e-27", "kg"),
    of("[G]", true, "6.67430e-11", "m3.kg-1.s-2"),
    of("[g]", true, "9.80665", "m/s2"),
    of("atm", false, "101325", "Pa"),
    of("[ly]", true, "1", "[c].a_j"),
    of("gf", true, "1", "g.[g]"),
    of("[lbf_av]", false, "1", "[lb_av].[g]"),
    // CGS
    of("Ky", true, "1", "cm-1"),
    of("Gal", true, "1", "cm/s2"),
    of("dyn", true, "1", "g.cm/s2"),
    of("erg", true, "1", "dyn.cm"),
    of("P", true, "1", "dyn.s/cm2"),
    of("St", true, "1", "cm2/s"),
    of("G", true, "1e-4", "T"),
    of("Ci", true, "37e9", "Bq"),
    of("R", true, "2.58e-4", "C/kg"),
    of("RAD", true, "100", "erg/g"),
    of("REM", true, "1", "RAD"),
    // customary lengths, areas, volumes
    of("[in_i]", false, "2.54", "cm"),
    of("[ft_i]", false, "12", "[in_i]"),
    of("[yd_i]", false, "3", "[ft_i]"),
    of("[mi_i]", false, "5280", "[ft_i]"),
    of("[fth_i]", false, "6", "[ft_i]"),
    of("[nmi_i]", false, "1852", "m"),
    of("[kn_i]", false, "1", "[nmi_i]/h"),
    of("[sin_i]", false, "1", "[in_i]2"),
    of("[sft_i]", false, "1", "[ft_i]2"),
    of("[syd_i]", false, "1", "[yd_i]2"),
    of("[cin_i]", false, "1", "[in_i]3"),
    of("[cft_i]", false, "1", "[ft_i]3"),
    of("[cyd_i]", false, "1", "[yd_i]3"),
    of("[mil_i]", false, "1e-3", "[in_i]"),
    of("[hd_i]", false, "4", "[in_i]"),
    of("[gal_us]", false, "231", "[in_i]3"),
    of("[qt_us]", false, "1", "[gal_us]/4"),
    of("[pt_us]", false, "1", "[qt_us]/2"),
    of("[foz_us]", false, "1", "[pt_us]/16"),
    of("[cup_us]", false, "16", "[tbs_us]"),
    of("[tbs_us]", false, "1", "[foz_us]/2"),
    of("[tsp_us]", false, "1", "[tbs_us]/3"),
    of("[cup_m]", false, "240", "mL"),
    of("[tbs_m]", false, "15", "mL"),
    of("[tsp_m]", false, "5", "mL"),
    of("[foz_m]", false, "30", "mL"),
    of("[bu_us]", false, "2150.42", "[in_i]3"),
    of("[gal_br]", false, "4.54609", "l"),
    of("[pt_br]", false, "1", "[gal_br]/8"),
    of("[foz_br]", false, "1", "[pt_br]/20"),
    of("[ft_us]", false, "1200", "m/3937"),
    of("[acr_us]", false, "160", "[rd_us]2"),
    of("[acr_br]", false, "4840", "[yd_br]2"),
    of("[in_br]", false, "2.539998", "cm"),
    of("[ft_br]", false, "12", "[in_br]"),
    of("[yd_br]", false, "3", "[ft_br]"),
    of("[drp]", false, "1", "ml/20"),
    // customary masses
    of("[gr]", false, "64.79891", "mg"),
    of("[lb_av]", false, "7000", "[gr]"),
    of("[oz_av]", false, "1", "[lb_av]/16"),
    of("[dr_av]", false, "1", "[oz_av]/16"),
    of("[stone_av]", false, "14", "[lb_av]"),
    of("[ston_av]", false, "2000", "[lb_av]"),
    of("[lton_av]", false, "2240", "[lb_av]"),
    of("[scwt_av]", false, "100", "[lb_av]"),
    of("[lcwt_av]", false, "112", "[lb_av]"),
    of("[oz_tr]", false, "480", "[gr]"),
    of("[lb_tr]", false, "12", "[oz_tr]"),
    of("[car_m]", false, "2e-1", "g"),
    of("[oz_m]", false, "28", "g"),
    // pressure, energy, power, rates
    of("[psi]", false, "1", "[lbf_av]/[in_i]2"),
    of("m[Hg]", true, "133.3220", "kPa"),
    of("m[H2O]", true, "9.80665", "kPa"),
    of("[in_i'Hg]", false, "1", "m[Hg].[in_i]/m"),
    of("[in_i'H2O]", false, "1", "m[H2O].[in_i]/m"),
    of("att", false, "1", "kgf/cm2"),
    of("cal_[15]", true, "4.18580", "J"),
    of("cal_[20]", true, "4.18190", "J"),
    of("cal_m", true, "4.19002", "J"),
    of("cal_IT", true, "4.1868", "J"),
    of("cal_th", true, "4.184", "J"),
    of("cal", true, "1", "cal_th"),
    of("[Cal]", false, "1", "kcal_th"),
    of("[Btu_IT]", false, "1.05505585262", "kJ"),
    of("[Btu_th]", false, "1.054350", "kJ"),
    of("[Btu]", false, "1", "[Btu_th]"),
    of("[HP]", false, "550", "[ft_i].[lbf_av]/s"),
    of("[MET]", false, "3.5", "mL/min/kg"),
    of("mho", true, "1", "S"),
    of("Ao", false, "0.1", "nm"),
    of("b", false, "100", "fm2"),
    of("sb", true, "1", "cd/cm2"),
    of("Lmb", true, "1", "cd/cm2/[pi]"),
    of("ph", true, "1e-4", "lx"),
    of("Bi", true, "10", "A"),
    of("Gb", true, "1", "Oe.cm"),
    of("Oe", true, "250", "/[pi].A/m"),
    of("Mx", true, "1e-8", "Wb"),
    of("tex", true, "1", "g/km"),
    of("[den]", false, "1", "g/9/km"),
    // further customary units
    of("[bf_i]", false, "144", "[in_i]3"),
    of("[cr_i]", false, "128", "[ft_i]3"),
    of("[yd_us]", false, "3", "[ft_us]"),
    of("[in_us]", false, "1", "[ft_us]/12"),
    of("[rd_us]", false, "16.5", "[ft_us]"),
    of("[ch_us]", false, "4", "[rd_us]"),
    of("[fth_us]", false, "6", "[ft_us]"),
    of("[fur_us]", false, "40", "[rd_us]"),
    of("[mi_us]", false, "8", "[fur_us]"),
    of("[smi_us]", false, "1", "[mi_us]2"),
    of("[sct]", false, "1", "[mi_us]2"),
    of("[rd_br]", false, "16.5", "[ft_br]"),
    of("[mi_br]", false, "5280", "[ft_br]"),
    of("[bbl_us]", false, "42", "[gal_us]"),
    of("[gil_us]", false, "1", "[pt_us]/4"),
    of("[fdr_us]", false, "1", "[foz_us]/8"),
    of("[min_us]", false, "1", "[fdr_us]/60"),
    of("[pk_us]", false, "1", "[bu_us]/4"),
    of("[dqt_us]", false, "1", "[pk_us]/8"),
    of("[dpt_us]", false, "1", "[dqt_us]/2"),
    of("[gal_wi]", false, "1", "[bu_us]/8"),
    of("[pk_br]", false, "2", "[gal_br]"),
    of("[bu_br]", false, "4", "[pk_br]"),
    of("[qt_br]", false, "1", "[gal_br]/4"),
    of("[gil_br]", false, "1", "[pt_br]/4"),
    of("[fdr_br]", false, "1", "[foz_br]/8"),
    of("[pwt_tr]", false, "24", "[gr]"),
    of("[sc_ap]", false, "20", "[gr]"),
    of("[dr_ap]", false, "3", "[sc_ap]"),
    of("[oz_ap]", false, "8", "[dr_ap]"),
    of("[lb_ap]", false, "12", "[oz_ap]"),
    of("[lne]", false, "1", "[in_i]/12"),
    of("[pnt]", false, "1", "[lne]/6"),
    of("[pca]", false, "12", "[pnt]"),
    of("[smoot]", false, "67", "[in_i]"),
    of("[car_Au]", false, "1", "{1}/24"),
    of("[PRU]", false, "1", "mm[Hg].s/ml"),
    of("[wood'U]", false, "1", "mm[Hg].min/L"),
    of("[Btu_39]", false, "1.05967", "kJ"),
    of("[Btu_59]", false, "1.05480", "kJ"),
    of("[Btu_60]", false, "1.05468", "kJ"),
    of("[Btu_m]", false, "1.05587", "kJ"),
    // chemistry and the laboratory
    of("eq", true, "1", "mol"),
    of("osm", true, "1", "mol"),
    of("g%", true, "1", "g/dl"),
    of("U", true, "1", "umol/min"),
    of("[S]", false, "1e-13", "s"),
    of("st", true, "1", "m3"),
    own("[pH]", false),
    own("[IU]", true),
    own("[iU]", true),
    own("[arb'U]", false),
    own("[USP'U]", false),
    own("[GPL'U]", false),
    own("[MPL'U]", false),
    own("[APL'U]", false),
    own("[beth'U]", false),
    own("[anti'Xa'U]", false),
    own("[todd'U]", false),
    own("[dye'U]", false),
    own("[smgy'U]", false),
    own("[bdsk'U]", false),
    own("[ka'U]", false),
    own("[knk'U]", false),
    own("[mclg'U]", false),
    own("[tb'U]", false),
    own("[CCID_50]", false),
    own("[TCID_50]", false),
    own("[EID_50]", false),
    own("[PFU]", false),
    own("[FFU]", false),
    own("[CFU]", false),
    own("[IR]", false),
    own("[BAU]", false),
    own("[AU]", false),
    own("[Amb'a'1'U]", false),
    own("[PNU]", false),
    own("[Lf]", false),
    own("[D'ag'U]", false),
    own("[FEU]", false),
    own("[ELU]", false),
    own("[EU]", false),
    own("[HPF]", false),
    own("[LPF]", false),
    of("[diop]", false, "1", "/m"),
    own("[p'diop]", false),
    own("%[slope]", false),
    of("[mesh_i]", false, "1", "/[in_i]"),
    of("[Ch]", false, "1", "mm/3"),
    own("[hnsf'U]", false),
    own("[hp_X]", false),
    own("[NTU]", false),
    own("[FNU]", false),
    own("[hp_C]", false),
    own("[m/s2/Hz^0.5]", false),
    // levels
    own("Np", true),
    own("B", true),
    own("B[SPL]", true),
    own("B[V]", true),
    own("B[mV]", true),
    own("B[uV]", true),
    own("B[10.nV]", true),
    own("B[W]", true),
    own("B[kW]", true),
    // information
    own("bit_s", false),
    of("bit", true, "1", "{1}"),
    of("By", true, "8", "bit"),
    of("Bd", true, "1", "/s"),
];

#[cfg(test)]
mod tests {
    use super::*;

    /// NIST SP 811 (2008), Appendix B.8 (factors as printed there; exact ones in bold there are given in full), and
    /// the SI's own prefixes.
    const PUBLISHED: &[(&str, &str, f64)] = &[
        ("[lb_av]", "kg", 0.453_592_37),
        ("[oz_av]", "g", 28.349_523_125),
        ("[oz_tr]", "g", 31.103_476_8),
        ("[gr]", "mg", 64.798_91),
        ("[ston_av]", "kg", 907.184_74),
        ("[in_i]", "cm", 2.54),
        ("[ft_i]", "m", 0.3048),
        ("[yd_i]", "m", 0.9144),
        ("[mi_i]", "km", 1.609_344),
        ("[nmi_i]", "m", 1852.0),
        ("[mi_i]/h", "m/s", 0.447_04),
        ("[gal_us]", "L", 3.785_411_784),
        ("[gal_br]", "L", 4.546_09),
        ("[lbf_av]", "N", 4.448_221_615_260_5),
        ("kgf", "N", 9.806_65),
        ("cal", "J", 4.184),
        ("cal_IT", "J", 4.1868),
        ("[Cal]", "kJ", 4.184),
        ("eV", "J", 1.602_176_634e-19),
        ("atm", "Pa", 101_325.0),
        ("bar", "kPa", 100.0),
        ("erg", "J", 1e-7),
        ("dyn", "N", 1e-5),
        ("Ci", "Bq", 3.7e10),
        ("t", "kg", 1000.0),
        ("d", "s", 86_400.0),
        ("h", "min", 60.0),
        ("wk", "d", 7.0),
        ("km/h", "m/s", 1.0 / 3.6),
        ("kW.h", "MJ", 3.6),
        ("kg", "g", 1000.0),
        ("g", "kg", 0.001),
        ("ng/L", "pg/mL", 1.0),
        ("pg/mL", "ng/L", 1.0),
        ("ug/L", "ng/mL", 1.0),
        ("kW", "W", 1000.0),
        ("mm2", "cm2", 0.01),
        ("ms", "s", 0.001),
        ("/min", "Hz", 1.0 / 60.0),
        ("Hz", "/min", 60.0),
        ("%", "1", 0.01),
        ("10*3/uL", "10*9/L", 1.0),
        ("10^3", "1", 1000.0),
        ("mL/min", "L/h", 0.06),
        ("L/s", "L/min", 60.0),
        ("mmol/L", "umol/mL", 1.0),
        ("U/L", "kat/L", 1.0 / 60e6),
        ("m[Hg]", "Pa", 133_322.0),
        ("mm[Hg]", "Pa", 133.322),
        ("cm[H2O]", "Pa", 98.0665),
        ("m[IU]/L", "[IU]/mL", 1e-6),
        ("N.m", "J", 1.0),
        ("N.s", "kg.m/s", 1.0),
        ("{count}/min", "/min", 1.0),
        ("{score}", "1", 1.0),
        ("m/s", "m/s", 1.0),
    ];

    #[test]
    fn published_factors_are_exact() {
        for (from, to, factor) in PUBLISHED {
            assert_eq!(convert(from, to), Some(Affine { times: *factor, plus: 0.0 }), "{from} -> {to}");
        }
    }

    /// UCUM 2.2, `ucum-essence.xml` of 2024-06-17, by the class that it gives each unit; beside each the chain of its
    /// definitions there, worked out by hand.
    const DEFINED: &[(&str, &str, f64)] = &[
        // avoirdupois: [gr] = 64.79891 mg, [lb_av] = 7000 [gr], [oz_av] = [lb_av]/16, [stone_av] = 14 [lb_av]
        ("[lb_av]", "g", 453.592_37),
        ("[oz_av]", "[lb_av]", 0.0625),
        ("[stone_av]", "kg", 6.350_293_18),
        // intcust: [in_i] = 2.54 cm, [ft_i] = 12 [in_i], [mi_i] = 5280 [ft_i]
        ("[in_i]", "mm", 25.4),
        ("[ft_i]", "cm", 30.48),
        ("[mi_i]", "m", 1609.344),
        // iso1000: min = 60 s, h = 60 min, d = 24 h, wk = 7 d, a_j = 365.25 d, a = a_j
        ("min", "s", 60.0),
        ("d", "h", 24.0),
        ("a", "d", 365.25),
        // clinical: m[Hg] = 133.3220 kPa, m[H2O] = 9.80665 kPa; iso1000: bar = 1e5 Pa; misc: [psi] = [lbf_av]/[in_i]2
        ("mm[Hg]", "kPa", 0.133_322),
        ("bar", "Pa", 100_000.0),
        ("mbar", "hPa", 1.0),
        ("kPa", "bar", 0.01),
        ("[psi]", "Pa", 6_894.757_293_168_362),
        // const: [g] = 9.80665 m/s2, gf = g.[g], [lbf_av] = [lb_av].[g]
        ("kgf", "N", 9.806_65),
        ("[lbf_av]", "N", 4.448_221_615_260_5),
        ("N", "[lbf_av]", 0.224_808_943_099_710_48),
        // speed, from the above
        ("km/h", "m/s", 0.277_777_777_777_777_8),
        ("m/s", "km/h", 3.6),
        ("[mi_i]/h", "km/h", 1.609_344),
        // heat: cal = cal_th, cal_th = 4.184 J, [Cal] = kcal_th; si: W = J/s
        ("cal", "J", 4.184),
        ("kcal", "kJ", 4.184),
        ("J", "cal", 0.239_005_736_137_667_3),
        ("kcal/d", "W", 0.048_425_925_925_925_93),
        ("W", "J/s", 1.0),
        // dimless: % = 10*-2, [ppth] = 10*-3
        ("%", "{fraction}", 0.01),
        ("1", "%", 100.0),
        ("/min", "/h", 60.0),
        ("Hz", "/s", 1.0),
        ("{beats}/min", "Hz", 0.016_666_666_666_666_666),
        // concentration within one kind
        ("mg/dL", "g/L", 0.01),
        ("umol/L", "mmol/L", 0.001),
        // annotations and the unity mean nothing
        ("{steps}", "1", 1.0),
        ("{count}", "{steps}", 1.0),
        ("{steps}/d", "/d", 1.0),
        ("kg{dry}", "kg", 1.0),
    ];

    #[test]
    fn the_definitions_of_ucum_give_the_factors() {
        for (from, to, factor) in DEFINED {
            assert_eq!(convert(from, to), Some(Affine { times: *factor, plus: 0.0 }), "{from} -> {to}");
        }
    }

    /// Printed to seven digits in NIST SP 811.
    #[test]
    fn rounded_published_factors() {
        for (from, to, factor) in [
            ("[psi]", "kPa", 6.894_757),
            ("[HP]", "W", 745.6999),
            ("deg", "rad", 1.745_329e-2),
            ("deg/s", "rad/s", 1.745_329e-2),
            ("[acr_us]", "m2", 4046.873),
            ("N", "kgf", 0.101_971_6),
            ("[in_i'Hg]", "kPa", 3.386_389),
            ("Oe", "A/m", 79.577_47),
            ("Gb", "A", 0.795_774_7),
            ("[oz_ap]", "g", 31.103_48),
            ("[mi_us]", "km", 1.609_347),
            ("[bu_us]", "L", 35.239_07),
        ] {
            let times = convert(from, to).unwrap().times;
            assert!((times / factor - 1.0).abs() < 5e-6, "{from} -> {to}: {times}");
        }
    }

    #[test]
    fn temperatures() {
        let at = |from: &str, to: &str, x: f64| {
            let affine = convert(from, to).unwrap();
            x.mul_add(affine.times, affine.plus)
        };
        for (from, to, x, y) in [
            ("[degF]", "Cel", 32.0, 0.0),
            ("[degF]", "Cel", 212.0, 100.0),
            ("[degF]", "Cel", 98.6, 37.0),
            ("[degF]", "Cel", -40.0, -40.0),
            ("Cel", "[degF]", 37.0, 98.6),
            ("Cel", "K", 0.0, 273.15),
            ("K", "Cel", 310.15, 37.0),
            ("mK", "Cel", 310_150.0, 37.0),
            ("[degF]", "K", 32.0, 273.15),
            ("Cel", "mK", -273.15, 0.0),
        ] {
            assert!((at(from, to, x) - y).abs() < 1e-9, "{x} {from} -> {} {to}, not {y}", at(from, to, x));
        }
        // As differences, degrees are plain sizes.
        assert_eq!(convert("Cel/h", "K/h"), Some(Affine { times: 1.0, plus: 0.0 }));
        assert_eq!(convert("Cel", "s"), None);
        assert_eq!(convert("K2", "K"), None);
    }

    #[test]
    fn what_does_not_convert() {
        for (from, to) in [
            ("mg/dL", "mmol/L"),
            ("kg", "N"),
            ("mol", "1"),
            ("[IU]", "U"),
            ("[IU]/L", "mg/L"),
            ("[pH]", "1"),
            ("dB", "1"),
            ("B[SPL]", "B"),
            ("m", "m2"),
            ("kg", "KG"),
            ("kg", ""),
        ] {
            assert_eq!(convert(from, to), None, "{from} -> {to}");
        }
        assert_eq!(convert("[pH]", "[pH]"), Some(Affine { times: 1.0, plus: 0.0 }));
        assert_eq!(convert("dB", "dB"), Some(Affine { times: 1.0, plus: 0.0 }));
    }

    #[test]
    fn sound_codes_and_others() {
        for code in [
            "kg",
            "m/s",
            "/min",
            "{score}",
            "{count}",
            "{steps}",
            "mm2",
            "m/s2",
            "10*3/uL",
            "10*-6",
            "mm[Hg]",
            "1",
            "%",
            "%{total}",
            "kg.m2/s2",
            "kg.(m/s)",
            "mL/min/{1.73_m2}",
            "(kg)",
            "dB",
            "[lb_av]",
            "Cel",
            "s-1",
            "m+2",
            "ug{dry}",
            "mg/(kg.d)",
            "100/L",
            "dag",
            "umol/min",
            "a",
            "mo",
            "g%",
            "L/min",
            "uV",
            "[in_i]",
        ] {
            assert!(is_ucum(code), "{code}");
        }
        for code in [
            "",
            " ",
            "kilo",
            "KG",
            "Kg",
            "kgs",
            "µg",
            "mmHg",
            "°C",
            "lb",
            "bpm",
            "kg m",
            "kg..m",
            "kg/",
            "kg*m",
            "(kg",
            "kg)",
            "m0",
            "m2 ",
            "{",
            "}",
            "{}",
            "{a",
            "2-",
            "m-",
            "[lb_av",
            "lb_av]",
            "kmin",
            "m99999999999",
            "0",
            "/",
            "N·m",
            "m²",
            "[foo]",
        ] {
            assert!(!is_ucum(code), "{code}");
        }
        assert!(!is_ucum(&"(".repeat(5000)));
        assert!(!is_ucum(&"m.".repeat(5000)));
    }

    #[test]
    fn every_atom_can_be_computed_and_stands_once() {
        for row in ATOMS {
            assert!(is_ucum(row.code), "{}", row.code);
            assert_eq!(ATOMS.iter().filter(|other| other.code == row.code).count(), 1, "{}", row.code);
            assert_eq!(convert(row.code, row.code), Some(Affine { times: 1.0, plus: 0.0 }));
        }
        for (spoken, code) in SPOKEN {
            assert!(is_ucum(code), "{spoken} -> {code}");
        }
    }

    #[test]
    fn there_and_back() {
        for (from, to, _) in PUBLISHED {
            let (there, back) = (convert(from, to).unwrap().times, convert(to, from).unwrap().times);
            assert!((there * back - 1.0).abs() < 4.0 * f64::EPSILON, "{from} {to}");
        }
    }

    #[test]
    fn conversions_asked_for_again() {
        let mut known = Conversions::default();
        for _ in 0..2 {
            assert_eq!(known.convert("km/h", "m/s"), convert("km/h", "m/s"));
            assert_eq!(known.convert("mg/dL", "mmol/L"), None);
        }
        (0..2000).for_each(|number| assert_eq!(known.convert(&format!("{number}x"), "kg"), None));
        assert!(known.0.values().map(HashMap::len).sum::<usize>() <= 500);
    }

    #[test]
    fn factors_beyond_a_double() {
        assert_eq!(convert("[e]20", "C20"), None);
        assert_eq!(convert("Qm60", "qm60"), None);
        assert!((convert("eV2", "J2").unwrap().times / 2.566_969_966_5e-38 - 1.0).abs() < 1e-9);
    }

    proptest::proptest! {
        #[test]
        fn no_text_does_harm(text in "[a-zA-Z0-9\\[\\]{}()./*^%'+-]{0,12}", other in "(kg|m/s|Cel|1)") {
            if let Some(affine) = convert(&text, &other) {
                proptest::prop_assert!(affine.times.is_normal() && affine.plus.is_finite());
            }
            proptest::prop_assert_eq!(convert(&text, &text).is_some(), is_ucum(&text));
        }
    }

    #[test]
    fn meant_units() {
        for (written, code) in [
            ("mmHg", "mm[Hg]"),
            ("°C", "Cel"),
            ("KG", "kg"),
            ("CM", "cm"),
            ("mmol/l", ""),
            ("MMOL/L", "mmol/L"),
            ("lbs", "[lb_av]"),
            ("Newton", "N"),
            ("N·m", "N.m"),
            ("kg/m²", "kg/m2"),
            ("kg / m^2", "kg/m2"),
            ("lbs/day", "[lb_av]/d"),
            ("µmol/L", "umol/L"),
            ("hpa", "hPa"),
            ("m/sec", "m/s"),
            ("quux", ""),
            ("kg", ""),
        ] {
            assert_eq!(meant(written).unwrap_or_default(), code, "{written}");
        }
    }

    #[test]
    fn why_two_units_are_apart() {
        let apart = |from, to| apart(from, to).unwrap_or_default();
        assert_eq!(
            apart("mg/dL", "mmol/L"),
            "one is a mass in a volume, the other an amount of substance in a volume, and the factor depends on the substance"
        );
        assert_eq!(
            apart("kg", "N"),
            "one is a mass, the other a force; a device that shows force in kilograms means kgf"
        );
        assert_eq!(apart("s", "m/s"), "one is a time, the other a speed");
        assert_eq!(apart("[IU]/L", "U/L").split(',').next(), Some("one is in [IU]"));
        assert_eq!(apart("{steps}", "kg"), "one is a plain number, the other a mass");
        assert_eq!(apart("lux", "kg"), "", "no code: that is said by others");
        assert_eq!(apart("g", "kg"), "");
    }
}
