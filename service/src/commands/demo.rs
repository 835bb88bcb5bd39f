//! `kilter demo`: the whole job on the demo data.

use crate::cli::DemoArgs;
use crate::demo;
use crate::exit::Done;

pub(crate) fn run(arguments: &DemoArgs) -> anyhow::Result<Done> {
    demo::play(&arguments.dir, arguments.serve)?;
    Ok(Done::Well)
}
