//! Runner.

pub mod plan;

use sha2::{Digest, Sha256};

/// Returns the SHA-256 of `bytes` in hexadecimal digits.
pub(crate) fn hexadecimal_digest(bytes: &[u8]) -> String {
    Sha256::digest(bytes).iter().map(|byte| format!("{byte:02x}")).collect()
}
