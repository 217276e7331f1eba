//! The ledger: the account of one run.

use serde::{Deserialize, Serialize};

/// The account of one run.
#[derive(Clone, Debug, Serialize, Deserialize)]
pub struct Ledger {}
