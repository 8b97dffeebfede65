//! XML documents.
