//! The hash of a file's content.

use std::fs::File;
use std::io::{self, Read};
use std::path::Path;

use kilter_model::fingerprint::hexadecimal;
use sha2::{Digest, Sha256};

/// SHA-256 of a file's content, hexadecimal.
pub(super) fn sha256_of(path: &Path) -> io::Result<String> {
    let mut file = File::open(path)?;
    let mut hash = Sha256::new();
    let mut buffer = vec![0; 1 << 16];
    loop {
        match file.read(&mut buffer)? {
            0 => return Ok(hexadecimal(&hash.finalize())),
            read => hash.update(&buffer[..read]),
        }
    }
}
