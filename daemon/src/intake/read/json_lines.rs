//! JSON lines.
