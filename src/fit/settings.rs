//! What the configuration can change about a fit.

use serde::{Deserialize, Serialize};

use super::windows::{WINDOWS, Window};

/// Settings of the fit.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct FitSettings {
    /// Lines to fit, by name (`H-alpha`, `H-beta`, ... `H8`, `H9`).
    #[serde(with = "names")]
    pub lines: Vec<Window>,
    /// Fewest lines that a spectrum must cover to be fitted at all.
    pub fewest_windows: usize,
}

impl Default for FitSettings {
    fn default() -> Self {
        FitSettings {
            lines: WINDOWS.into_iter().filter(|window| window.is_default).collect(),
            fewest_windows: 2,
        }
    }
}

mod names {
    use super::{WINDOWS, Window};
    use serde::de::Error;
    use serde::{Deserialize, Deserializer, Serialize, Serializer};

    pub fn serialize<S: Serializer>(windows: &[Window], serializer: S) -> Result<S::Ok, S::Error> {
        windows.iter().map(|window| window.name).collect::<Vec<_>>().serialize(serializer)
    }

    pub fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<Window>, D::Error> {
        let known = || WINDOWS.map(|window| window.name).join(", ");
        Vec::<String>::deserialize(deserializer)?
            .iter()
            .map(|name| {
                WINDOWS.into_iter().find(|window| window.name == name).ok_or_else(|| {
                    D::Error::custom(format!("cannot fit the line {name}: known are {}", known()))
                })
            })
            .collect()
    }
}
