//! Numbers for people. Machines get the shortest form that reads back the same.

/// A value as it was measured: the shortest form.
pub fn plain(value: f64) -> String {
    value.to_string()
}

/// A value or a dash.
pub fn plain_or_dash(value: Option<f64>) -> String {
    value.map_or_else(dash, plain)
}

/// What stands for a value that there is not.
pub fn dash() -> String {
    "–".to_owned()
}
