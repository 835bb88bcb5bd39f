//! kilter from outside: the built program and its public interfaces.

mod architecture;
mod commands;
mod demo;
mod drop_folder;
mod fit_commands;
mod fits;
mod ledger_commands;
mod live;
mod service;
mod sql;
mod support;
