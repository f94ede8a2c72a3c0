//! The daemon as a whole, from outside: the program itself, a real broker, and a client beside it.

#[path = "../common/mod.rs"]
mod common;

mod alike;
mod answers;
mod intake;
mod life;
mod link;
mod people;
