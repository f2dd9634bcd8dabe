//! binary
fn main() {}
