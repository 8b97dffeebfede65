//! JSON documents.
