//! `[assume]`: what is assumed for rehearsing, and what blinded monitoring is held against.

use super::forms::Form;
use super::keys::{Bounds, Check, Kind, Tab, Table, join, key, needed, one_of};
use super::model::{Arm, Assume, AssumedCorrelation, AssumedMeans};
use super::written::{Node, Spot, Value};

const NUMBERS: Kind = Kind::List(&Kind::Number(Bounds::ANY), 1);

pub(crate) static ASSUME: Table = Table {
    name: "[assume]",
    doc: "What is assumed for rehearsing, and what blinded monitoring is held against.",
    keys: &[
        needed(
            "means",
            Kind::Either(&[Kind::Map(Form::Filled, &NUMBERS), NUMBERS]),
            "The means at each visit: by arm, or of the one group",
        ),
        needed("sd", Kind::List(&Kind::Number(Bounds::POSITIVE), 1), "The standard deviation at each visit"),
        needed(
            "correlation",
            Kind::Either(&[Kind::Table(&CORRELATION), Kind::List(&NUMBERS, 1)]),
            "The correlation between visits: { ar1 = … }, { compound_symmetry = … } or a full matrix",
        ),
        key("dropout", Kind::Number(Bounds::SHARE_OR_NONE), "0", "The share of subjects gone by the last visit"),
        key("power", Kind::Number(Bounds::SHARE), "0.9", "The power wanted"),
    ],
    one_of: &[],
};

static CORRELATION: Table = Table {
    name: "correlation",
    doc: "The correlation between visits.",
    keys: &[
        key("ar1", Kind::Number(Bounds::CORRELATION), "", "First-order autoregressive"),
        key("compound_symmetry", Kind::Number(Bounds::CORRELATION), "", "Equal between all visits"),
    ],
    one_of: &["ar1", "compound_symmetry"],
};

/// `[assume]`. `lengths` are the numbers of visits that its lists may have.
pub(crate) fn assume(check: &mut Check<'_>, tab: &Tab<'_>, arms: &[Arm], lengths: &[usize]) -> Option<Assume> {
    let means = means(check, tab, arms, lengths);
    let sd = tab.node("sd").map(|node| numbers(check, node, &tab.path_of("sd"), lengths)).unwrap_or_default();
    let correlation = correlation(check, tab, sd.len());
    Some(Assume {
        means: means?,
        sd,
        correlation: correlation?,
        dropout: tab.number("dropout").unwrap_or(0.0),
        power: tab.number("power").unwrap_or(0.9),
    })
}

fn means(check: &mut Check<'_>, tab: &Tab<'_>, arms: &[Arm], lengths: &[usize]) -> Option<AssumedMeans> {
    let node = tab.node("means")?;
    let path = tab.path_of("means");
    let codes: Vec<&str> = arms.iter().map(|arm| arm.code.as_str()).collect();
    let Value::Table(entries) = &node.value else {
        if !arms.is_empty() {
            let wrong = "The plan has arms, but the means are of one group.";
            check.error(&node.spot, &path, wrong, format!("a list for each of {}", one_of(&codes)));
        }
        return Some(AssumedMeans::OneGroup(numbers(check, node, &path, lengths)));
    };
    if arms.is_empty() {
        check.error(&node.spot, &path, "The plan has no arms, but the means are by arm.", "one list");
    }
    let mut means = vec![];
    for entry in &entries.0 {
        let path = join(&path, &entry.key);
        check.refer(&entry.spot, &path, &entry.key, "arm", &codes);
        means.push((entry.key.clone(), numbers(check, &entry.node, &path, lengths)));
    }
    let near = |code: &str| means.iter().any(|(arm, _)| super::diagnostics::nearest(arm, [code]).is_some());
    for code in codes.iter().filter(|code| !near(code)) {
        check.error(&node.spot, &path, format!("The means of \"{code}\" are not there."), "a list for each arm");
    }
    Some(AssumedMeans::ByArm(means))
}

/// The numbers of a list, of which there must be one for each visit.
fn numbers(check: &mut Check<'_>, node: &Node, path: &str, lengths: &[usize]) -> Vec<f64> {
    let Value::List(items) = &node.value else { return vec![] };
    right_length(check, &node.spot, path, items.len(), lengths);
    items.iter().filter_map(Node::number).collect()
}

fn right_length(check: &mut Check<'_>, spot: &Spot, path: &str, length: usize, lengths: &[usize]) {
    if !lengths.contains(&length) && !lengths.contains(&0) && length > 0 {
        let counts: Vec<String> = lengths.iter().map(usize::to_string).collect();
        let wrong = format!("The list has {length} items, but the analyses have {} visits.", counts.join(" or "));
        check.error(spot, path, wrong, "one number for each visit");
    }
}

fn correlation(check: &mut Check<'_>, tab: &Tab<'_>, visits: usize) -> Option<AssumedCorrelation> {
    if let Some(inner) = tab.table("correlation", &CORRELATION) {
        if let Some(ar1) = inner.number("ar1") {
            return Some(AssumedCorrelation::Ar1(ar1));
        }
        let equal = inner.number("compound_symmetry")?;
        if visits > 1 && equal <= -1.0 / (visits - 1) as f64 {
            let wrong = format!("{visits} visits cannot all have a correlation of {equal} with each other.");
            check.at(&inner, "compound_symmetry", wrong, format!("more than -1/{}", visits - 1));
        }
        return Some(AssumedCorrelation::CompoundSymmetry(equal));
    }
    let row = |node: &Node| match &node.value {
        Value::List(items) => items.iter().map(Node::number).collect::<Option<Vec<f64>>>(),
        _ => None,
    };
    let matrix: Vec<Vec<f64>> = tab.list("correlation").iter().map(row).collect::<Option<_>>()?;
    if let Some(wrong) = no_correlation(&matrix, visits) {
        check.at(tab, "correlation", wrong, "a row for each visit, 1 in the diagonal, the same on both sides of it");
    }
    Some(AssumedCorrelation::Matrix(matrix))
}

/// Why a matrix is no correlation matrix.
fn no_correlation(matrix: &[Vec<f64>], visits: usize) -> Option<&'static str> {
    let size = matrix.len();
    if size != visits && visits > 0 || matrix.iter().any(|row| row.len() != size) {
        return Some("The matrix has not a row and a column for each visit.");
    }
    if (0..size).any(|i| matrix[i][i] != 1.0) {
        return Some("A visit's correlation with itself is 1.");
    }
    if (0..size).any(|i| (0..i).any(|j| matrix[i][j] != matrix[j][i])) {
        return Some("The matrix is not the same on both sides of its diagonal.");
    }
    // Cholesky's decomposition exists exactly for the matrices that some data could have.
    let mut lower = vec![vec![0.0; size]; size];
    for i in 0..size {
        for j in 0..=i {
            let sum: f64 = (0..j).map(|k| lower[i][k] * lower[j][k]).sum();
            let rest = matrix[i][j] - sum;
            if i == j && rest <= 1e-12 {
                return Some("No readings could have these correlations: the matrix is not positive definite.");
            }
            lower[i][j] = if i == j { rest.sqrt() } else { rest / lower[j][j] };
        }
    }
    None
}
