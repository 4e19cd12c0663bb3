//! One error type: each variant carries facts, and the text says what was found and what to do.

/// What went wrong, with the facts a caller needs to name the row, the column or the component.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum Error {
    /// The numbers do not form a mixture.
    #[error("{}{what}: {advice}", component.map(|k| format!("component at position {k}: ")).unwrap_or_default())]
    Mixture {
        /// What was found.
        what: String,
        /// Position of the component, where one is at fault.
        component: Option<usize>,
        /// What to do.
        advice: String,
    },
    /// A covariance has no Cholesky factor.
    #[error(
        "component at position {component}: the covariance is not positive definite (pivot {pivot} is not above zero): \
         raise floor, use fewer components, or leave out a column that repeats others"
    )]
    NotPositiveDefinite {
        /// Position of the component.
        component: usize,
        /// The pivot that failed.
        pivot: usize,
    },
    /// A column cannot be used.
    #[error("column {column}: {what}: {advice}")]
    Column {
        /// Position among the fitted columns.
        column: usize,
        /// What was found.
        what: String,
        /// What to do.
        advice: String,
    },
    /// A batch lacks a column or holds it in a type that cannot be widened.
    #[error("column {name:?}: {what}: {advice}")]
    Schema {
        /// Name of the column.
        name: String,
        /// What was found.
        what: String,
        /// What to do.
        advice: String,
    },
    /// A value in a row cannot be used.
    #[error("row {row}, column {name:?}: {what}: {advice}")]
    Row {
        /// Row number in the source, before any filter.
        row: u64,
        /// Name of the column.
        name: String,
        /// What was found.
        what: String,
        /// What to do.
        advice: String,
    },
    /// An option is outside what it allows.
    #[error("option {option}: {found}: {advice}")]
    Option {
        /// Name of the option.
        option: String,
        /// What was found.
        found: String,
        /// What is allowed.
        advice: String,
    },
    /// The rows as a whole cannot be used.
    #[error("{what}: {advice}")]
    Data {
        /// What was found.
        what: String,
        /// What to do.
        advice: String,
    },
    /// Bytes that are not what they should be.
    #[error("damaged: {what}")]
    Damaged {
        /// What was found.
        what: String,
    },
    /// A fault of drumlin itself.
    #[error("internal error: {what} (please report it)")]
    Internal {
        /// What was found.
        what: String,
    },
}

/// Shorthand for results of this crate.
pub type Result<T> = std::result::Result<T, Error>;
