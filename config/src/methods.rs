//! Method files: a test method's numbers as data, shipped ones and the laboratory's own.

use crate::embedded;
use crate::fault::{Faults, harmless};
use crate::reader::{Table, read};
use serde::Deserialize;
use std::borrow::Cow;
use std::collections::BTreeMap;
use std::sync::OnceLock;
use tarecup_core::method::Method;
use tarecup_core::names::MethodName;
use toml::Spanned;
use toml::de::DeValue;

/// Methods by name.
pub type Methods = BTreeMap<MethodName, Method>;

/// The methods that come with the program.
///
/// # Errors
/// Only when a shipped file is broken, which a test excludes.
pub fn shipped() -> Result<Methods, Faults> {
    static SHIPPED: OnceLock<Result<Methods, Faults>> = OnceLock::new();
    let read = || embedded::METHODS.iter().map(|(file, text)| parse(file, text).map(|m| (m.name.clone(), m))).collect();
    SHIPPED.get_or_init(read).clone()
}

/// Reads a method file: the keys of one method at the top level.
///
/// # Errors
/// What is wrong, with its place; a method that contradicts itself is refused too.
pub fn parse(file: &str, text: &str) -> Result<Method, Faults> {
    read(file, text, |table| method(table, None))
}

/// Reads the method in a table. In the configuration file its name is the table's: `[method.NAME]`.
pub(crate) fn method(table: &Table<'_>, name: Option<&MethodName>) -> Option<Method> {
    let mut tree = table.to_tree();
    if let Some(name) = name {
        if let Some(entry) = table.get("name") {
            entry.fault_of_key(
                "is given twice: the table's own name is the method's",
                "no name key here",
                "taking this line out",
            );
            return None;
        }
        let at = table.at..table.at;
        let value = Spanned::new(at.clone(), DeValue::String(Cow::Owned(name.as_str().into())));
        tree.as_mut().insert(Spanned::new(at, Cow::Borrowed("name")), value);
    }
    let method = match Method::deserialize(toml::Deserializer::from(tree)) {
        Ok(method) => method,
        Err(e) => {
            table.refuse(&e, "method");
            return None;
        }
    };
    let contradictions = contradictions(&method);
    for (key, says) in &contradictions {
        let path = table.path(&harmless(key));
        let try_this = "correcting one of the two, or starting again from a shipped method";
        table.fault_at(table.locate(key), &path, &harmless(says), "a method that does not contradict itself", try_this);
    }
    contradictions.is_empty().then_some(method)
}

/// Key path and words for what contradicts itself or is not said.
fn contradictions(m: &Method) -> Vec<(String, String)> {
    let texts = [("title", &m.title), ("edition", &m.edition)].into_iter().filter(|(_, text)| text.trim().is_empty());
    let wrong = m.faults().into_iter().map(|(key, says)| (key, format!("is wrong: {says}")));
    texts.map(|(key, _)| (key.to_string(), "is empty".to_string())).chain(wrong).collect()
}
