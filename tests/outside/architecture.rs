//! The direction of dependencies, and what each crate must never know.

use std::collections::{BTreeMap, BTreeSet};

use cargo_metadata::{DependencyKind, MetadataCommand};

/// For each crate the crates of the workspace that it may use.
fn arrows() -> BTreeMap<&'static str, BTreeSet<&'static str>> {
    let own = |names: &[&'static str]| names.iter().copied().collect();
    BTreeMap::from([
        ("kilter-model", own(&[])),
        ("kilter-tables", own(&["kilter-model"])),
        ("kilter-fit", own(&["kilter-model"])),
        ("kilter-drift", own(&["kilter-model"])),
        ("kilter-ledger", own(&["kilter-model", "kilter-drift"])),
        ("kilter", own(&["kilter-model", "kilter-tables", "kilter-fit", "kilter-drift", "kilter-ledger"])),
        ("kilter-test-postgres", own(&[])),
        ("kilter-tests", own(&["kilter"])),
    ])
}

/// Packages that only one crate may use.
const ONLY: [(&str, &str); 6] = [
    ("polars", "kilter-tables"),
    ("rusqlite", "kilter-ledger"),
    ("axum", "kilter"),
    ("tokio", "kilter"),
    ("prometheus", "kilter"),
    ("anyhow", "kilter"),
];

#[test]
fn dependencies_point_one_way() {
    let manifest = concat!(env!("CARGO_MANIFEST_DIR"), "/../Cargo.toml");
    let metadata = MetadataCommand::new().manifest_path(manifest).no_deps().exec().expect("cargo metadata");
    let arrows = arrows();
    let names: BTreeSet<String> = metadata.packages.iter().map(|package| package.name.to_string()).collect();
    let known: BTreeSet<String> = arrows.keys().map(|name| (*name).to_owned()).collect();
    assert_eq!(names, known, "the list of crates");
    for package in &metadata.packages {
        let normal = package.dependencies.iter().filter(|d| d.kind == DependencyKind::Normal);
        let used: BTreeSet<&str> = normal.map(|dependency| dependency.name.as_str()).collect();
        let siblings: BTreeSet<&str> = used.iter().copied().filter(|name| known.contains(*name)).collect();
        assert_eq!(siblings, arrows[package.name.as_str()], "crates that {} uses", package.name);
        for (guarded, owner) in ONLY {
            assert!(
                !used.contains(guarded) || package.name.as_str() == owner,
                "{} uses {guarded}, which only {owner} may",
                package.name
            );
        }
    }
}
