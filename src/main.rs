//! tailcast
fn main() {}
