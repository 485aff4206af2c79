//! The digest that ties a ground file to the ground part of a site file.

use borewake_model::ground::Ground;
use sha2::{Digest as _, Sha256};

use super::Site;

/// Changes when what is digested, or how, changes.
const FORM: &str = "borewake ground 4\n";

impl Site {
    /// SHA-256, in hexadecimal, over what is under the site and nothing else: layers, zones, edge, barriers, wells, gauges and
    /// neighbours as read. Comments, layout, and the way a quantity is spelled do not change it, nor do channels or limits.
    #[must_use]
    pub fn ground_digest(&self) -> String {
        digest(&self.ground)
    }
}

/// The digest of a ground.
fn digest(ground: &Ground) -> String {
    // A plain struct of names and finite numbers always has a JSON form; `null` would only make the digest differ.
    let text = serde_json::to_string(ground).unwrap_or_else(|_| "null".to_owned());
    let hash = Sha256::new()
        .chain_update(FORM)
        .chain_update(text)
        .finalize();
    hash.iter().map(|byte| format!("{byte:02x}")).collect()
}
