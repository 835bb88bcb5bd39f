//! Reading and writing model files, their fingerprint and their JSON Schema.

use std::io::{self, BufWriter, Read};

use serde::{Serialize, Serializer};
use serde_json::{Map, Value};
use sha2::{Digest, Sha256};

use crate::cells::shorten;
use crate::check::{Fault, check, check_fingerprint};
use crate::file::{FORMAT, ModelFile};
use crate::limits::{LARGEST_FILE, LARGEST_VALUES};
use crate::signature::{SIGNATURE_KEY, Signature, check_signature};
use crate::unique_keys::check_text;

/// The major version of the format that this crate reads.
const MAJOR_VERSION: &str = "1";
/// Keys that the fingerprint leaves out.
const NOT_IN_FINGERPRINT: [&str; 2] = ["fingerprint", SIGNATURE_KEY];

/// Why a text is no usable model file.
#[derive(Debug, thiserror::Error)]
#[non_exhaustive]
pub enum ModelFileError {
    /// The text is no JSON, or has a key of the wrong type.
    #[error("not a model file: {0}")]
    Json(#[from] serde_json::Error),
    /// The document is something else.
    #[error("not a model file: `format` is {found}, expected \"{FORMAT}\"")]
    Format {
        /// What stands under `format`.
        found: String,
    },
    /// The format is of a later major version.
    #[error("format version {found} is not supported; this build reads version {MAJOR_VERSION}.x")]
    Version {
        /// What stands under `format_version`.
        found: String,
    },
    /// A key stands twice in one object, so that two readers could read two different models.
    #[error("not a model file: key `{place}` stands twice")]
    DuplicateKey {
        /// Path of the key.
        place: String,
    },
    /// The text is longer than a model file may be.
    #[error("not a model file: larger than {LARGEST_FILE} bytes")]
    TooLarge,
    /// The text has more values than a model file may have.
    #[error("not a model file: more than {LARGEST_VALUES} values")]
    TooManyValues,
    /// The text could not be read.
    #[error("could not read the model file: {0}")]
    Read(#[from] io::Error),
    /// The document contradicts itself.
    #[error("{}", faults_in_words(.0))]
    Faults(Vec<Fault>),
}

fn faults_in_words(faults: &[Fault]) -> String {
    faults.iter().map(ToString::to_string).collect::<Vec<_>>().join("; ")
}

impl ModelFile {
    /// Reads a model file and checks it, fingerprint and signature included.
    ///
    /// A text from elsewhere costs bounded time and memory, whatever stands in it. Whoever takes it
    /// from a file or a connection should stop at [`LARGEST_FILE`] bytes too, as
    /// [`read_limited`] does.
    ///
    /// # Errors
    /// [`ModelFileError`], which names the faults that were found.
    pub fn from_json(text: &str) -> Result<Self, ModelFileError> {
        if text.len() > LARGEST_FILE {
            return Err(ModelFileError::TooLarge);
        }
        check_text(text)?;
        let seals = check_document(&serde_json::from_str(text)?)?;
        let model: Self = serde_json::from_str(text)?;
        let mut faults = check(&model);
        faults.extend(seals);
        if faults.is_empty() { Ok(model) } else { Err(ModelFileError::Faults(faults)) }
    }

    /// Sets the fingerprint to that of the model as it now stands. A signature of something else
    /// falls away.
    ///
    /// # Errors
    /// The JSON error of a model that holds numbers which are not finite.
    pub fn seal(&mut self) -> Result<(), serde_json::Error> {
        let current = fingerprint(&serde_json::to_value(&*self)?)?;
        if self.fingerprint != current {
            self.extra.shift_remove(SIGNATURE_KEY);
            self.fingerprint = current;
        }
        Ok(())
    }

    /// The model file as JSON for people and programs, one line for each list of numbers.
    ///
    /// # Errors
    /// The JSON error of a model that holds numbers which are not finite.
    pub fn to_json(&self) -> Result<String, serde_json::Error> {
        let mut text = String::new();
        write_value(&serde_json::to_value(self)?, 0, &mut text);
        text.push('\n');
        Ok(text)
    }
}

/// Whether a document is a model file of a version that can be read; returns the faults of its
/// fingerprint and signature.
fn check_document(document: &Value) -> Result<Vec<Fault>, ModelFileError> {
    let word = |key: &str| document.get(key).and_then(Value::as_str);
    if word("format") != Some(FORMAT) {
        let found = document.get("format").map_or_else(|| "absent".into(), Value::to_string);
        return Err(ModelFileError::Format { found: shorten(&found) });
    }
    let version = word("format_version").unwrap_or_default();
    if version.split('.').next() != Some(MAJOR_VERSION) {
        return Err(ModelFileError::Version { found: shorten(version) });
    }
    Ok(check_fingerprint(document).into_iter().chain(check_signature(document)).collect())
}

/// Reads a text of at most [`LARGEST_FILE`] bytes, for [`ModelFile::from_json`].
///
/// # Errors
/// [`ModelFileError::TooLarge`] as soon as there is more, [`ModelFileError::Read`] where the source
/// fails or the text is not UTF-8.
pub fn read_limited(source: impl Read) -> Result<String, ModelFileError> {
    let mut text = String::new();
    let limit = LARGEST_FILE as u64 + 1;
    source.take(limit).read_to_string(&mut text)?;
    if text.len() > LARGEST_FILE { Err(ModelFileError::TooLarge) } else { Ok(text) }
}

/// Indented JSON in which a list of plain values stays on one line.
fn write_value(value: &Value, depth: usize, text: &mut String) {
    let indent = |text: &mut String, depth: usize| {
        text.push('\n');
        text.extend(std::iter::repeat_n("  ", depth));
    };
    match value {
        Value::Object(entries) if !entries.is_empty() => {
            text.push('{');
            for (position, (key, entry)) in entries.iter().enumerate() {
                if position > 0 {
                    text.push(',');
                }
                indent(text, depth + 1);
                text.push_str(&Value::from(key.as_str()).to_string());
                text.push_str(": ");
                write_value(entry, depth + 1, text);
            }
            indent(text, depth);
            text.push('}');
        }
        Value::Array(elements) if elements.iter().any(|e| e.is_object() || e.is_array()) => {
            text.push('[');
            for (position, element) in elements.iter().enumerate() {
                if position > 0 {
                    text.push(',');
                }
                indent(text, depth + 1);
                write_value(element, depth + 1, text);
            }
            indent(text, depth);
            text.push(']');
        }
        plain => text.push_str(&plain.to_string()),
    }
}

/// The fingerprint of a document: SHA-256 over its canonical JSON (RFC 8785) without the keys
/// `fingerprint` and `signature`.
///
/// # Errors
/// The JSON error of a document that has no canonical form.
pub fn fingerprint(document: &Value) -> Result<String, serde_json::Error> {
    Ok(format!("sha256:{}", hexadecimal(&digest(document)?)))
}

/// The 32 bytes of the fingerprint.
pub(crate) fn digest(document: &Value) -> Result<[u8; 32], serde_json::Error> {
    let mut writer = BufWriter::new(HashWriter(Sha256::new()));
    match document {
        Value::Object(entries) => serde_json_canonicalizer::to_writer(&Fingerprinted(entries), &mut writer)?,
        other => serde_json_canonicalizer::to_writer(other, &mut writer)?,
    }
    let hash = writer.into_inner().map_err(|error| serde_json::Error::io(error.into_error()))?;
    Ok(hash.0.finalize().into())
}

/// The entries of a document that its fingerprint covers.
struct Fingerprinted<'a>(&'a Map<String, Value>);

impl Serialize for Fingerprinted<'_> {
    fn serialize<S: Serializer>(&self, target: S) -> Result<S::Ok, S::Error> {
        target.collect_map(self.0.iter().filter(|(key, _)| !NOT_IN_FINGERPRINT.contains(&key.as_str())))
    }
}

/// Hashes what is written, so that the canonical text need not be kept.
struct HashWriter(Sha256);

impl io::Write for HashWriter {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        self.0.update(bytes);
        Ok(bytes.len())
    }

    fn flush(&mut self) -> io::Result<()> {
        Ok(())
    }
}

/// Bytes in lower-case hexadecimal digits.
pub fn hexadecimal(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}

/// JSON Schema (draft 2020-12) of the model file.
pub fn schema() -> Value {
    let mut schema = schemars::schema_for!(ModelFile).to_value();
    if let Some(entries) = schema.as_object_mut() {
        entries.insert("title".into(), "kilter model file".into());
        if let Some(Value::Object(properties)) = entries.get_mut("properties") {
            let mut signature = schemars::schema_for!(Signature).to_value();
            if let Some(signature) = signature.as_object_mut() {
                signature.shift_remove("$schema");
            }
            properties.insert(SIGNATURE_KEY.into(), signature);
        }
    }
    schema
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::check::tests::programme;

    #[test]
    fn a_sealed_file_reads_back_bit_for_bit() {
        let mut model = programme();
        let numbers = [0.1 + 0.2, -0.0, 5e-324, f64::MAX, 1.0 / 3.0, 2.5e-8, 123_456_789.123_456_78, 1.0];
        for (slot, number) in model.coefficients.values_mut().flatten().zip(numbers) {
            *slot = number;
        }
        model.seal().unwrap();
        let text = model.to_json().unwrap();
        let again = ModelFile::from_json(&text).unwrap();
        let bits = |m: &ModelFile| m.coefficients.values().flatten().map(|c| c.to_bits()).collect::<Vec<_>>();
        assert_eq!(bits(&again), bits(&model));
        assert_eq!(again, model);
        assert_eq!(again.to_json().unwrap(), text);
    }

    #[test]
    fn a_changed_digit_is_noticed() {
        let mut model = programme();
        model.seal().unwrap();
        let text = model.to_json().unwrap().replace("-0.0579284", "-0.0579285");
        let error = ModelFile::from_json(&text).unwrap_err().to_string();
        assert!(error.contains("fingerprint"), "{error}");
    }

    #[test]
    fn the_order_of_keys_and_white_space_do_not_count() {
        let mut model = programme();
        model.seal().unwrap();
        let value = serde_json::to_value(&model).unwrap();
        let reversed: serde_json::Map<_, _> =
            value.as_object().unwrap().iter().rev().map(|(k, v)| (k.clone(), v.clone())).collect();
        assert_eq!(fingerprint(&Value::Object(reversed)).unwrap(), model.fingerprint);
    }

    #[test]
    fn keys_of_a_later_minor_version_are_kept() {
        let mut model = programme();
        model.format_version = "1.7".into();
        model.extra.insert("later".into(), serde_json::json!({"a": [1, 2]}));
        model.seal().unwrap();
        let again = ModelFile::from_json(&model.to_json().unwrap()).unwrap();
        assert_eq!(again.extra["later"]["a"][1], 2);
    }

    #[test]
    fn other_documents_are_refused_by_name() {
        for (text, part) in [
            ("{}", "`format` is absent"),
            (r#"{"format": "other"}"#, "`format` is \"other\""),
            (r#"{"format": "kilter-model", "format_version": "2.0"}"#, "version 2.0 is not supported"),
            (r#"{"format": "kilter-model", "format_version": "1.0"}"#, "missing field"),
            ("{\"format\": \"kilter-model\",\n", "line 2"),
        ] {
            let error = ModelFile::from_json(text).unwrap_err().to_string();
            assert!(error.contains(part), "{text}: {error}");
        }
    }

    /// The schema document beside this crate is the one that the types generate. After a change
    /// of the types write it anew with `cargo run -- schema model > model-format/schema.json`.
    #[test]
    fn the_committed_schema_is_current() {
        let committed: Value = serde_json::from_str(include_str!("../schema.json")).unwrap();
        assert!(committed == schema(), "model-format/schema.json is stale");
    }

    #[test]
    fn a_model_file_follows_its_schema() {
        let validator = jsonschema::validator_for(&schema()).unwrap();
        let mut model = programme();
        model.seal().unwrap();
        let document = serde_json::to_value(&model).unwrap();
        assert!(validator.is_valid(&document), "{:?}", validator.iter_errors(&document).next());
        let mut broken = document.clone();
        broken["terms"] = "one".into();
        assert!(!validator.is_valid(&broken));
    }
}
