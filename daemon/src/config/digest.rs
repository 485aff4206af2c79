//! The digest that ties a ground file to the ground part of a site file.

use borewake_model::ground::Ground;
use sha2::{Digest as _, Sha256};

use super::{EmbankmentSettings, Site, WaterSettings};

/// Changes when what is digested, or how, changes.
const FORM: &str = "borewake ground 5\n";

impl Site {
    /// SHA-256, in hexadecimal, over what is under the site and nothing else: layers, zones, edge, barriers, stages, wells, gauges and
    /// neighbours as read, with what a unit of an open water's channel stands for, or gauges and drives of an embankment. Comments, layout, and the way a quantity is spelled do not change it, nor do channels or limits.
    #[must_use]
    pub fn ground_digest(&self) -> String {
        digest(&self.ground, &self.waters, self.embankment.as_ref())
    }
}

/// The digest of a ground, or of an embankment's gauges and of what it answers to.
fn digest(
    ground: &Ground,
    waters: &[WaterSettings],
    embankment: Option<&EmbankmentSettings>,
) -> String {
    // A plain struct of names and finite numbers always has a JSON form; `null` would only make the digest differ.
    let text = serde_json::to_string(ground).unwrap_or_else(|_| "null".to_owned());
    let mut hash = Sha256::new().chain_update(FORM).chain_update(text);
    for water in waters {
        hash = hash.chain_update(format!("water {} ", water.weight));
    }
    if let Some(embankment) = embankment {
        let text = serde_json::to_string(&embankment.model()).unwrap_or_else(|_| "null".to_owned());
        hash = hash.chain_update("embankment ").chain_update(text);
        for drive in &embankment.drives {
            hash = hash.chain_update(format!(" {}", drive.factor));
        }
    }
    let hash = hash.finalize();
    hash.iter().map(|byte| format!("{byte:02x}")).collect()
}
