//! Reading and writing model files, their fingerprint and their JSON Schema.

use serde_json::Value;
use sha2::{Digest, Sha256};

use crate::check::{Fault, check, check_fingerprint};
use crate::file::{FORMAT, ModelFile};

/// The major version of the format that this crate reads.
const MAJOR_VERSION: &str = "1";

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
    /// The document contradicts itself.
    #[error("{}", faults_in_words(.0))]
    Faults(Vec<Fault>),
}

fn faults_in_words(faults: &[Fault]) -> String {
    faults.iter().map(ToString::to_string).collect::<Vec<_>>().join("; ")
}

impl ModelFile {
    /// Reads a model file and checks it, fingerprint included.
    ///
    /// # Errors
    /// [`ModelFileError`], which names every fault that was found.
    pub fn from_json(text: &str) -> Result<Self, ModelFileError> {
        let document: Value = serde_json::from_str(text)?;
        let word = |key: &str| document.get(key).and_then(Value::as_str);
        if word("format") != Some(FORMAT) {
            let found = document.get("format").map_or_else(|| "absent".into(), Value::to_string);
            return Err(ModelFileError::Format { found });
        }
        let version = word("format_version").unwrap_or_default();
        if version.split('.').next() != Some(MAJOR_VERSION) {
            return Err(ModelFileError::Version { found: version.to_owned() });
        }
        let model: Self = serde_json::from_str(text)?;
        let mut faults = check(&model);
        faults.extend(check_fingerprint(&document));
        if faults.is_empty() { Ok(model) } else { Err(ModelFileError::Faults(faults)) }
    }

    /// Sets the fingerprint to that of the model as it now stands.
    ///
    /// # Errors
    /// The JSON error of a model that holds numbers which are not finite.
    pub fn seal(&mut self) -> Result<(), serde_json::Error> {
        self.fingerprint = fingerprint(&serde_json::to_value(&*self)?)?;
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
    let mut bare = document.clone();
    if let Some(entries) = bare.as_object_mut() {
        entries.shift_remove("fingerprint");
        entries.shift_remove("signature");
    }
    let canonical = serde_json_canonicalizer::to_vec(&bare)?;
    Ok(format!("sha256:{}", hexadecimal(&Sha256::digest(&canonical))))
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
        assert_eq!(committed, schema(), "model-format/schema.json is stale");
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
