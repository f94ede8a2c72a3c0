//! argv → command → exit code.
fn main() {}
