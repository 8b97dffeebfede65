//! Workbooks.
