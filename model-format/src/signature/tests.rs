//! Tests of signatures.

use super::*;
use crate::check::tests::programme;
use crate::fingerprint::ModelFileError;

fn bytes<const N: usize>(text: &str) -> [u8; N] {
    bytes_from_hexadecimal("test", text).unwrap()
}

/// RFC 8032, section 7.1: TEST 1, TEST 2, TEST 3 and TEST SHA(abc), as secret key, public key,
/// message, signature.
const RFC_8032: [(&str, &str, &[u8], &str); 4] = [
    (
        "9d61b19deffd5a60ba844af492ec2cc44449c5697b326919703bac031cae7f60",
        "d75a980182b10ab7d54bfed3c964073a0ee172f3daa62325af021a68f707511a",
        &[],
        "e5564300c360ac729086e2cc806e828a84877f1eb8e5d974d873e065224901555fb8821590a33bacc61e39701cf9b46b\
         d25bf5f0595bbe24655141438e7a100b",
    ),
    (
        "4ccd089b28ff96da9db6c346ec114e0f5b8a319f35aba624da8cf6ed4fb8a6fb",
        "3d4017c3e843895a92b70aa74d1b7ebc9c982ccf2ec4968cc0cd55f12af4660c",
        &[0x72],
        "92a009a9f0d4cab8720e820b5f642540a2b27b5416503f8fb3762223ebdb69da085ac1e43e15996e458f3613d0f11d8c\
         387b2eaeb4302aeeb00d291612bb0c00",
    ),
    (
        "c5aa8df43f9f837bedb7442f31dcb7b166d38535076f094b85ce3a2e0b4458f7",
        "fc51cd8e6218a1a38da47ed00230f0580816ed13ba3303ac5deb911548908025",
        &[0xaf, 0x82],
        "6291d657deec24024827e69c3abe01a30ce548a284743a445e3680d7db5ac3ac18ff9b538d16f290ae67f760984dc659\
         4a7c15e9716ed28dc027beceea1ec40a",
    ),
    (
        "833fe62409237b9d62ec77587520911e9a759cec1d19755b7da901b96dca3d42",
        "ec172b93ad5e563bf4932c70e1245034c35467ef2efd4d64ebf819683467e2bf",
        &[
            0xdd, 0xaf, 0x35, 0xa1, 0x93, 0x61, 0x7a, 0xba, 0xcc, 0x41, 0x73, 0x49, 0xae, 0x20, 0x41, 0x31,
            0x12, 0xe6, 0xfa, 0x4e, 0x89, 0xa9, 0x7e, 0xa2, 0x0a, 0x9e, 0xee, 0xe6, 0x4b, 0x55, 0xd3, 0x9a,
            0x21, 0x92, 0x99, 0x2a, 0x27, 0x4f, 0xc1, 0xa8, 0x36, 0xba, 0x3c, 0x23, 0xa3, 0xfe, 0xeb, 0xbd,
            0x45, 0x4d, 0x44, 0x23, 0x64, 0x3c, 0xe8, 0x0e, 0x2a, 0x9a, 0xc9, 0x4f, 0xa5, 0x4c, 0xa4, 0x9f,
        ],
        "dc2a4459e7369633a52b1bf277839a00201009a3efbf3ecb69bea2186c26b58909351fc9ac90b3ecfdfbc7c66431e030\
         3dca179c138ac17ad9bef1177331a704",
    ),
];

#[test]
fn test_vectors_of_rfc_8032() {
    for (secret, public, message, signature) in RFC_8032 {
        let (secret, public) = (bytes(secret), bytes(public));
        assert_eq!(public_key(&secret), public);
        assert_eq!(sign_message(&secret, message), bytes(signature));
        verify_message(&public, message, &bytes(signature)).unwrap();
        let longer = [message, &[0]].concat();
        assert!(matches!(verify_message(&public, &longer, &bytes(signature)), Err(SignatureError::Wrong)));
    }
}

fn signed() -> (ModelFile, [u8; 32]) {
    let secret = bytes(RFC_8032[0].0);
    let mut model = programme();
    sign(&mut model, &secret).unwrap();
    (model, public_key(&secret))
}

#[test]
fn a_signed_file_reads_back_and_verifies() {
    let (model, key) = signed();
    let text = model.to_json().unwrap();
    let again = ModelFile::from_json(&text).unwrap();
    assert_eq!(again.extra, model.extra);
    verify_signature(&serde_json::from_str(&text).unwrap(), &key).unwrap();
    let mut unsigned = programme();
    unsigned.seal().unwrap();
    assert_eq!(again.fingerprint, unsigned.fingerprint, "a signature does not change the fingerprint");
}

#[test]
fn a_change_takes_the_signature_away_and_nothing_else_does() {
    let (mut model, key) = signed();
    model.seal().unwrap();
    verify_signature(&serde_json::to_value(&model).unwrap(), &key).unwrap();
    model.purpose = "Choice of programme".into();
    model.seal().unwrap();
    assert!(!model.extra.contains_key(SIGNATURE_KEY));
    ModelFile::from_json(&model.to_json().unwrap()).unwrap();
}

#[test]
fn signing_again_replaces_the_signature() {
    let (mut model, _) = signed();
    let other = bytes(RFC_8032[1].0);
    model.purpose = "Choice of programme".into();
    sign(&mut model, &other).unwrap();
    verify_signature(&serde_json::to_value(&model).unwrap(), &public_key(&other)).unwrap();
}

type Change = fn(&mut Value);

#[test]
fn what_is_wrong_with_a_signature_is_said() {
    let (model, key) = signed();
    let sound = serde_json::to_value(&model).unwrap();
    let other = bytes(RFC_8032[1].1);
    let cases: [(&str, [u8; 32], Change); 9] = [
        ("has no signature", key, |d| drop(d.as_object_mut().unwrap().shift_remove("signature"))),
        ("is signed with the key d75a98", other, |_| ()),
        ("does not belong to the content", key, |d| d["purpose"] = "another".into()),
        ("does not belong to the content", key, |d| {
            let value = d["signature"]["value"].as_str().unwrap().replacen('e', "f", 1);
            d["signature"]["value"] = value.into();
        }),
        ("`x` is not supported", key, |d| d["signature"]["algorithm"] = "x".into()),
        ("need 128 hexadecimal digits", key, |d| d["signature"]["value"] = "00".into()),
        ("need 128 hexadecimal digits", key, |d| d["signature"]["value"] = "é".repeat(64).into()),
        ("missing field `value`", key, |d| d["signature"] = serde_json::json!({"algorithm": "", "key": ""})),
        ("cannot be read: invalid type", key, |d| d["signature"] = 7.into()),
    ];
    for (part, key, change) in cases {
        let mut document = sound.clone();
        change(&mut document);
        let error = verify_signature(&document, &key).unwrap_err().to_string();
        assert!(error.contains(part), "{part}: {error}");
    }
}

/// The neutral element is a key under which the signature of zeros fits half of all messages.
#[test]
fn a_key_of_small_order_is_refused() {
    let (model, _) = signed();
    let mut neutral = [0; 32];
    neutral[0] = 1;
    let mut document = serde_json::to_value(&model).unwrap();
    document["signature"]["key"] = hexadecimal(&neutral).into();
    document["signature"]["value"] = hexadecimal(&[neutral, [0; 32]].concat()).into();
    assert!(verify_signature(&document, &neutral).is_err());
}

#[test]
fn a_file_with_a_broken_signature_is_not_read() {
    let (mut model, _) = signed();
    model.extra["signature"]["value"] = "0".repeat(128).into();
    let Err(ModelFileError::Faults(faults)) = ModelFile::from_json(&model.to_json().unwrap()) else {
        panic!("the signature is broken")
    };
    assert_eq!(faults.len(), 1);
    assert_eq!(faults[0].place, "signature");
    model.extra["signature"]["algorithm"] = "of-a-later-version".into();
    ModelFile::from_json(&model.to_json().unwrap()).unwrap();
}

#[test]
fn keys_are_read_from_hexadecimal_digits() {
    let (text, key) = (RFC_8032[0].1, bytes(RFC_8032[0].1));
    assert_eq!(key_from_hexadecimal(&format!(" {}\n", text.to_uppercase())).unwrap(), key);
    for text in ["", "d75a", &text[1..], &text.replace('d', "g")] {
        assert!(matches!(key_from_hexadecimal(text), Err(SignatureError::Malformed { .. })), "{text}");
    }
}
