//! `hushwatch simulate`
