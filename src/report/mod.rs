//! Reports: the ledger, and pictures.

mod ledger;
pub use ledger::Ledger;
