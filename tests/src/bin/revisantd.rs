//! The service `revisantd`, as built for the checks.

fn main() {}
