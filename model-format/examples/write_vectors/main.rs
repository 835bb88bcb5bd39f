//! Writes the test vectors anew: `cargo run -p kilter-model --example write_vectors`.
//!
//! The probabilities come from the scorer, so after a change of the arithmetic the difference in
//! the committed files shows what changed.

use std::path::Path;

mod models;
mod vectors;

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let folder = Path::new(env!("CARGO_MANIFEST_DIR")).join("vectors");
    for vector in models::all() {
        std::fs::write(folder.join(format!("{}.json", vector.name)), vectors::document(&vector))?;
    }
    Ok(())
}
