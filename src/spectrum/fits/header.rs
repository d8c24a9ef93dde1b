//! The cards of one FITS header.
//!
//! Tolerant where nothing depends on it (unparsable cards are kept as such, numbers may be written as
//! text), because real files need that; strict about sizes in `walk`.
//!
//! # Reference
//! FITS Standard 4.0 (2016), chapter 4; the CONTINUE and HIERARCH conventions.

use std::collections::HashMap;

/// Bytes of one card.
pub const CARD_BYTES: usize = 80;
/// Bytes of one block.
pub const BLOCK_BYTES: usize = 2880;

/// The value of one card.
#[derive(Debug, Clone, PartialEq)]
pub enum Value {
    /// Text in quotes, trailing blanks removed.
    Text(String),
    /// A whole number.
    Integer(i64),
    /// Any other number.
    Real(f64),
    /// `T` or `F`.
    Logical(bool),
    /// No value, or one that is none of the above (kept as written).
    Other(String),
}

/// One header: cards in file order.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Header {
    cards: Vec<(String, Value)>,
    /// Where the first card of each key (in capitals) is: wide tables have a thousand cards.
    places: HashMap<String, usize>,
    comments: Vec<String>,
}

impl Header {
    /// Parses the cards before `END`.
    pub fn parse(bytes: &[u8]) -> Self {
        let mut header = Header::default();
        for card in bytes.chunks_exact(CARD_BYTES) {
            let text = String::from_utf8_lossy(card);
            header.add_card(&text);
        }
        header
    }

    fn add(&mut self, key: &str, value: Value) {
        self.places.entry(key.to_ascii_uppercase()).or_insert(self.cards.len());
        self.cards.push((key.to_owned(), value));
    }

    fn add_card(&mut self, card: &str) {
        let key = card.get(..8).unwrap_or(card).trim_end();
        let rest = card.get(8..).unwrap_or_default();
        match key {
            "HISTORY" | "COMMENT" => self.comments.push(rest.trim().to_owned()),
            "CONTINUE" => self.continue_text(rest),
            "HIERARCH" => {
                if let Some((name, value)) = rest.split_once('=') {
                    self.add(name.trim(), parse_value(value));
                }
            }
            _ => {
                if let Some(value) = rest.strip_prefix("= ").or_else(|| rest.strip_prefix('=')) {
                    self.add(key, parse_value(value));
                }
            }
        }
    }

    /// A text that ends in `&` goes on in the next card.
    fn continue_text(&mut self, rest: &str) {
        if let (Some((_, Value::Text(text))), Value::Text(more)) = (self.cards.last_mut(), parse_value(rest))
            && text.ends_with('&')
        {
            text.pop();
            text.push_str(&more);
        }
    }

    /// The first card with this key, letter case aside.
    pub fn value(&self, key: &str) -> Option<&Value> {
        let place = self.places.get(&key.to_ascii_uppercase())?;
        self.cards.get(*place).map(|(_, value)| value)
    }

    /// Text that is not empty.
    pub fn text(&self, key: &str) -> Option<&str> {
        match self.value(key)? {
            Value::Text(text) if !text.trim().is_empty() => Some(text.trim()),
            _ => None,
        }
    }

    /// Text with its leading blanks and also where empty (trailing blanks are gone).
    pub fn text_as_written(&self, key: &str) -> Option<&str> {
        match self.value(key)? {
            Value::Text(text) => Some(text),
            Value::Integer(_) | Value::Real(_) | Value::Logical(_) | Value::Other(_) => None,
        }
    }

    /// A finite number, also one written as text.
    pub fn real(&self, key: &str) -> Option<f64> {
        let number = match self.value(key)? {
            Value::Integer(integer) => *integer as f64,
            Value::Real(real) => *real,
            Value::Text(text) => text.trim().parse().ok()?,
            Value::Logical(_) | Value::Other(_) => return None,
        };
        number.is_finite().then_some(number)
    }

    /// A whole number, also one written as text or with a zero fraction.
    pub fn integer(&self, key: &str) -> Option<i64> {
        match self.value(key)? {
            Value::Integer(integer) => Some(*integer),
            Value::Real(real) if real.fract() == 0.0 && real.abs() < 9e15 => Some(*real as i64),
            Value::Text(text) => text.trim().parse().ok(),
            Value::Real(_) | Value::Logical(_) | Value::Other(_) => None,
        }
    }

    /// `T` or `F`, also where written as text.
    pub fn logical(&self, key: &str) -> Option<bool> {
        match self.value(key)? {
            Value::Logical(logical) => Some(*logical),
            Value::Text(text) if text.trim().eq_ignore_ascii_case("t") => Some(true),
            Value::Text(text) if text.trim().eq_ignore_ascii_case("f") => Some(false),
            Value::Text(_) | Value::Integer(_) | Value::Real(_) | Value::Other(_) => None,
        }
    }

    /// Whether a card with this key exists.
    pub fn has(&self, key: &str) -> bool {
        self.value(key).is_some()
    }

    /// Any value as words, for identifiers.
    pub fn words(&self, key: &str) -> Option<String> {
        match self.value(key)? {
            Value::Text(text) => Some(text.trim().to_owned()),
            Value::Integer(integer) => Some(integer.to_string()),
            Value::Real(real) => Some(real.to_string()),
            Value::Logical(_) | Value::Other(_) => None,
        }
        .filter(|words| !words.is_empty())
    }

    /// HISTORY and COMMENT lines.
    pub fn comments(&self) -> &[String] {
        &self.comments
    }

    /// All cards with a value, in file order.
    pub fn cards(&self) -> &[(String, Value)] {
        &self.cards
    }
}

fn parse_value(field: &str) -> Value {
    let field = field.trim_start();
    if let Some(quoted) = field.strip_prefix('\'') {
        return Value::Text(parse_quoted(quoted));
    }
    let word = field.split('/').next().unwrap_or_default().trim();
    match word {
        "T" => return Value::Logical(true),
        "F" => return Value::Logical(false),
        _ => {}
    }
    if let Ok(integer) = word.parse::<i64>() {
        return Value::Integer(integer);
    }
    // FORTRAN writes exponents with D; Rust would also accept "nan" and "inf", which FITS does not.
    let is_number = word.starts_with(|c: char| c.is_ascii_digit() || "+-.".contains(c))
        && word.chars().all(|c| c.is_ascii_digit() || "+-.EeDd".contains(c));
    match word.replace(['D', 'd'], "E").parse::<f64>() {
        Ok(real) if is_number && real.is_finite() => Value::Real(real),
        _ => Value::Other(word.to_owned()),
    }
}

/// Text up to the closing quote; a doubled quote is one quote.
fn parse_quoted(quoted: &str) -> String {
    let mut text = String::new();
    let mut characters = quoted.chars().peekable();
    while let Some(character) = characters.next() {
        if character == '\'' && characters.next_if_eq(&'\'').is_none() {
            break;
        }
        text.push(character);
    }
    text.trim_end().to_owned()
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;

    #[test]
    fn values_of_every_kind_are_parsed() {
        let cards = [
            ("TEXT    = 'it''s   '           / comment", Value::Text("it's".into())),
            ("TEXT    = 'a / b'", Value::Text("a / b".into())),
            ("NUMBER  =                   42 / answer", Value::Integer(42)),
            ("NUMBER  =              1.5D-03", Value::Real(1.5e-3)),
            ("YES     =                    T", Value::Logical(true)),
            ("EMPTY   =", Value::Other(String::new())),
            ("AIRMASS = nan", Value::Other("nan".into())),
            ("AIRMASS = 1.2.3", Value::Other("1.2.3".into())),
            ("HIERARCH ESO PRO CATG = 'SCI'", Value::Text("SCI".into())),
        ];
        for (card, expected) in cards {
            let header = Header::parse(format!("{card:80}").as_bytes());
            assert_eq!(header.cards()[0].1, expected, "{card}");
        }
    }

    #[test]
    fn long_texts_continue() {
        let bytes = format!("{:80}{:80}", "LONG    = 'first &'", "CONTINUE  'second'");
        assert_eq!(Header::parse(bytes.as_bytes()).text("LONG"), Some("first second"));
    }
}
