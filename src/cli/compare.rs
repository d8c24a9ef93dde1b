//! `emberline compare`.
