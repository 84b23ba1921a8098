//! The door of the house.
fn main() {}
