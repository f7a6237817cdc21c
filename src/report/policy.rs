//! The content-security policy of every page: its own style sheet, and its own script where it has one.

use sha2::{Digest, Sha256};

/// Returns the policy: this one style sheet and this one script by their hashes, and nothing else from anywhere.
pub(super) fn policy(css: &str, script: Option<&str>) -> String {
    let hash = |text: &str| base64(&Sha256::digest(text.as_bytes()));
    let script = script.map_or_else(String::new, |text| format!(" script-src 'sha256-{}';", hash(text)));
    format!("default-src 'none'; style-src 'sha256-{}';{script} base-uri 'none'; form-action 'none'", hash(css))
}

/// Returns bytes in the base 64 of RFC 4648 §4.
fn base64(bytes: &[u8]) -> String {
    const LETTERS: &[u8; 64] = b"ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    let mut text = String::new();
    for chunk in bytes.chunks(3) {
        let part = |at: usize| usize::from(chunk.get(at).copied().unwrap_or(0));
        let joined = part(0) << 16 | part(1) << 8 | part(2);
        for letter in 0..4 {
            let value = joined >> (18 - 6 * letter) & 63;
            text.push(if letter > chunk.len() { '=' } else { char::from(LETTERS[value]) });
        }
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn base64_of_the_standard() {
        // RFC 4648 §10.
        let cases =
            [("", ""), ("f", "Zg=="), ("fo", "Zm8="), ("foo", "Zm9v"), ("foob", "Zm9vYg=="), ("foobar", "Zm9vYmFy")];
        for (plain, coded) in cases {
            assert_eq!(base64(plain.as_bytes()), coded);
        }
    }
}
