//! Fixed-width text.
