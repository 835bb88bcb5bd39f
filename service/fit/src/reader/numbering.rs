//! Numbers for texts: in the order of their first appearance among the rows of the fit.

use std::collections::HashMap;

/// Not numbered yet.
const UNKNOWN: u32 = u32::MAX;

/// Texts in the order of their first appearance, with their numbers.
#[derive(Debug, Clone, Default)]
pub(crate) struct Interner {
    texts: Vec<String>,
    index: HashMap<String, u32>,
}

impl Interner {
    pub(super) fn of(texts: impl IntoIterator<Item = String>) -> Self {
        let mut interner = Self::default();
        for text in texts {
            interner.number(&text);
        }
        interner
    }

    pub(super) fn number(&mut self, text: &str) -> u32 {
        if let Some(&number) = self.index.get(text) {
            return number;
        }
        let number = self.texts.len() as u32;
        self.texts.push(text.to_owned());
        self.index.insert(text.to_owned(), number);
        number
    }

    pub(super) fn into_texts(self) -> Vec<String> {
        self.texts
    }

    pub(crate) fn texts(&self) -> &[String] {
        &self.texts
    }
}

/// Levels of one batch and the numbers that they have among all rows; a level gets its number when
/// the first row of the fit has it.
#[derive(Debug, Clone, Default)]
pub(super) struct LevelNumbers {
    names: Vec<String>,
    numbers: Vec<u32>,
}

impl LevelNumbers {
    pub(super) fn of(names: Vec<String>) -> Self {
        let numbers = vec![UNKNOWN; names.len()];
        Self { names, numbers }
    }

    pub(super) fn number(&mut self, local: usize, all: &mut Interner) -> u32 {
        if self.numbers[local] == UNKNOWN {
            self.numbers[local] = all.number(&self.names[local]);
        }
        self.numbers[local]
    }
}
