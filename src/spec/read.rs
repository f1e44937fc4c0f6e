//! TOML values → typed raw values, each with its place in the file; every mismatch is recorded and reading goes on.
//!
//! Deserialisation by derive stops at the first value of a wrong type; a spec's problems are to be reported all
//! at once, so the spanned tree of the parser is read here value by value.

use super::diagnostic::{Problems, all_of, any_of, nearest, quoted};
use schemars::{JsonSchema, Schema, SchemaGenerator, json_schema};
use std::borrow::Cow;
use std::marker::PhantomData;
use std::ops::Range;
use toml::Spanned;
use toml::de::{DeTable, DeValue};

/// Most tables of one kind in a list: some checks compare each with all others.
const MAX_TABLES: usize = 500;

/// A value and where it stands in the file, in bytes.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Given<T> {
    /// Byte range of the value.
    pub(super) span: Range<usize>,
    /// The value.
    pub(super) value: T,
}

/// What a key of a table holds.
#[derive(Debug, Clone, Default, PartialEq)]
pub(super) enum Field<T> {
    /// The key is not there.
    #[default]
    Absent,
    /// It is there, but its value could not be read; the problem is recorded.
    Wrong,
    /// It is there.
    Given(Given<T>),
}

impl<T> Field<T> {
    /// The value, if there is a good one.
    pub(super) fn get(&self) -> Option<&Given<T>> {
        match self {
            Self::Given(given) => Some(given),
            Self::Absent | Self::Wrong => None,
        }
    }

    /// Whether the key is not there at all.
    pub(super) fn is_absent(&self) -> bool {
        matches!(self, Self::Absent)
    }
}

/// A type that a TOML value can be read as.
pub(super) trait Read: Sized + JsonSchema {
    /// What is expected, as it stands in a message: `a number`.
    fn expected() -> Cow<'static, str>;

    /// Reads the value; a mismatch is recorded and gives none.
    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self>;

    /// Whether the type is a table, so that a list of it is written with double brackets.
    const IS_TABLE: bool = false;
    /// Whether the type is a list of tables.
    const IS_TABLE_LIST: bool = false;
}

/// Reads a value with its place.
pub(super) fn read_field<T: Read>(
    value: &Spanned<DeValue<'_>>,
    problems: &mut Problems<'_>,
) -> Field<T> {
    let span = value.span();
    match T::read(value.get_ref(), &span, problems) {
        Some(value) => Field::Given(Given { span, value }),
        None => Field::Wrong,
    }
}

/// Records that a value is of another type than expected.
fn mismatch<T: Read>(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) {
    let found = match value {
        DeValue::String(_) => "a string",
        DeValue::Integer(_) => "a whole number",
        DeValue::Float(_) => "a number",
        DeValue::Boolean(_) => "true or false",
        DeValue::Datetime(_) => "a date or time",
        DeValue::Array(_) => "a list",
        DeValue::Table(_) => "a table",
    };
    problems
        .at(span, format!("{found} cannot stand here"))
        .expected(format!("expected {}", T::expected()));
}

/// Records a key that the table does not have.
pub(super) fn unknown_key(
    key: &Spanned<Cow<'_, str>>,
    table: &str,
    known: &[&str],
    problems: &mut Problems<'_>,
) {
    let word = key.get_ref();
    let diagnostic = problems.at(&key.span(), format!("unknown key {}", quoted(word)));
    diagnostic.expected(format!("{table} takes {}", all_of(known)));
    if let Some(near) = nearest(word, known.iter().copied()) {
        diagnostic.hint(format!("did you mean \"{near}\"?"));
    }
}

/// Records a key that a table needs.
pub(super) fn missing_key<T: Read>(
    table: &str,
    key: &str,
    span: &Range<usize>,
    problems: &mut Problems<'_>,
) {
    // Tables inside tables are written inline, those of the spec itself under a header.
    let header = match (table, T::IS_TABLE, T::IS_TABLE_LIST) {
        ("the spec", true, _) => Some(format!("[{key}]")),
        ("the spec", _, true) => Some(format!("[[{key}]]")),
        _ => None,
    };
    match header {
        Some(header) => problems
            .at(span, format!("the spec has no {header}"))
            .expected(format!("expected a table {header}")),
        None => problems
            .at(span, format!("{table} lacks the key \"{key}\""))
            .expected(format!("expected {key} = {}", T::expected())),
    };
}

impl Read for String {
    fn expected() -> Cow<'static, str> {
        "a string".into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        let text = value.as_str();
        if text.is_none() {
            mismatch::<Self>(value, span, problems);
        }
        text.map(str::to_owned)
    }
}

impl Read for bool {
    fn expected() -> Cow<'static, str> {
        "true or false".into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        let truth = value.as_bool();
        if truth.is_none() {
            mismatch::<Self>(value, span, problems);
        }
        truth
    }
}

impl Read for i64 {
    fn expected() -> Cow<'static, str> {
        "a whole number".into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        let Some(integer) = value.as_integer() else {
            mismatch::<Self>(value, span, problems);
            return None;
        };
        let number = Self::from_str_radix(integer.as_str(), integer.radix()).ok();
        if number.is_none() {
            problems
                .at(span, "this number is too large")
                .expected("expected a whole number of at most 18 digits");
        }
        number
    }
}

impl Read for f64 {
    fn expected() -> Cow<'static, str> {
        "a number".into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        let number: Option<Self> = match value {
            DeValue::Float(float) => float.as_str().parse().ok(),
            #[expect(
                clippy::cast_precision_loss,
                reason = "a whole number beyond 2^53 is no length, angle or threshold of any meaning"
            )]
            DeValue::Integer(integer) => i128::from_str_radix(integer.as_str(), integer.radix())
                .ok()
                .map(|n| n as Self),
            _ => {
                mismatch::<Self>(value, span, problems);
                return None;
            }
        };
        let finite = number.filter(|n| n.is_finite());
        if finite.is_none() {
            problems
                .at(span, "this is not a finite number")
                .expected("expected a finite number");
        }
        finite
    }
}

/// List of values, each with its place.
impl<T: Read> Read for Vec<Given<T>> {
    const IS_TABLE_LIST: bool = T::IS_TABLE;

    fn expected() -> Cow<'static, str> {
        format!("a list, each entry {}", T::expected()).into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        let Some(array) = value.as_array() else {
            if T::IS_TABLE && value.is_table() {
                problems
                    .at(span, "a single table cannot stand here")
                    .expected("expected a list of tables")
                    .hint("write the header in double brackets, [[…]], once for each entry");
            } else {
                mismatch::<Self>(value, span, problems);
            }
            return None;
        };
        if T::IS_TABLE && array.len() > MAX_TABLES {
            problems
                .at(span, format!("{} tables of one kind", array.len()))
                .expected(format!("expected at most {MAX_TABLES}"));
            return None;
        }
        let mut list = Vec::with_capacity(array.len());
        let mut good = true;
        for entry in array {
            match read_field(entry, problems) {
                Field::Given(given) => list.push(given),
                Field::Wrong | Field::Absent => good = false,
            }
        }
        good.then_some(list)
    }
}

impl<T: Read> JsonSchema for Given<T> {
    fn inline_schema() -> bool {
        T::inline_schema()
    }

    fn schema_name() -> Cow<'static, str> {
        T::schema_name()
    }

    fn schema_id() -> Cow<'static, str> {
        T::schema_id()
    }

    fn json_schema(generator: &mut SchemaGenerator) -> Schema {
        T::json_schema(generator)
    }
}

/// Keys chosen by the user, with values of one type.
#[derive(Debug, Clone, Default, PartialEq)]
pub(super) struct Entries<T>(pub(super) Vec<(Given<String>, Given<T>)>);

impl<T: Read> Read for Entries<T> {
    fn expected() -> Cow<'static, str> {
        format!("a table, each value {}", T::expected()).into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        let Some(table) = value.as_table() else {
            mismatch::<Self>(value, span, problems);
            return None;
        };
        let mut entries = Vec::with_capacity(table.len());
        for (key, value) in table {
            if let Field::Given(given) = read_field(value, problems) {
                let key = Given {
                    span: key.span(),
                    value: key.get_ref().clone().into_owned(),
                };
                entries.push((key, given));
            }
        }
        Some(Self(entries))
    }
}

impl<T: Read> JsonSchema for Entries<T> {
    fn inline_schema() -> bool {
        true
    }

    fn schema_name() -> Cow<'static, str> {
        format!("EntriesOf{}", T::schema_name()).into()
    }

    fn json_schema(generator: &mut SchemaGenerator) -> Schema {
        json_schema!({
            "type": "object",
            "additionalProperties": generator.subschema_for::<T>(),
        })
    }
}

/// A choice that is written as one of a few words.
pub(super) trait Choice: Copy + 'static {
    /// The words and what they stand for, in the order in which they are listed to the user.
    const WORDS: &'static [(&'static str, Self)];
}

/// The word that stands for a choice.
pub(super) fn word_of<T: Choice + PartialEq>(choice: T) -> &'static str {
    T::WORDS
        .iter()
        .find(|(_, c)| *c == choice)
        .map_or("", |(word, _)| word)
}

/// A value written as one of a few words.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Word<T>(pub(super) T);

impl<T: Choice> Word<T> {
    fn quoted_words() -> Vec<String> {
        T::WORDS.iter().map(|(w, _)| format!("\"{w}\"")).collect()
    }
}

impl<T: Choice> Read for Word<T> {
    fn expected() -> Cow<'static, str> {
        any_of(&Self::quoted_words()).into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        let Some(text) = value.as_str() else {
            mismatch::<Self>(value, span, problems);
            return None;
        };
        if let Some((_, choice)) = T::WORDS.iter().find(|(word, _)| *word == text) {
            return Some(Self(*choice));
        }
        let diagnostic = problems.at(span, format!("unknown word {}", quoted(text)));
        diagnostic.expected(format!("expected {}", Self::expected()));
        if let Some(near) = nearest(text, T::WORDS.iter().map(|(word, _)| *word)) {
            diagnostic.hint(format!("did you mean \"{near}\"?"));
        }
        None
    }
}

impl<T: Choice> JsonSchema for Word<T> {
    fn inline_schema() -> bool {
        true
    }

    fn schema_name() -> Cow<'static, str> {
        format!("WordOf{}", std::any::type_name::<PhantomData<T>>()).into()
    }

    fn json_schema(_: &mut SchemaGenerator) -> Schema {
        let words: Vec<&str> = T::WORDS.iter().map(|(word, _)| *word).collect();
        json_schema!({ "type": "string", "enum": words })
    }
}

/// Reads a table by its keys; see [`table`].
pub(super) fn table_of<'v, 'i, T: Read>(
    value: &'v DeValue<'i>,
    span: &Range<usize>,
    problems: &mut Problems<'_>,
) -> Option<&'v DeTable<'i>> {
    let table = value.as_table();
    if table.is_none() {
        mismatch::<T>(value, span, problems);
    }
    table
}

/// Defines a table of the spec once: its keys, their types and their documentation give the struct, the
/// reader and the JSON Schema.
macro_rules! table {
    (
        $(#[doc = $table_doc:literal])*
        $name:ident ($written:literal) {
            $( $(#[doc = $doc:literal])* $key:ident $((required $required:tt))? : $type:ty, )*
        }
    ) => {
        $(#[doc = $table_doc])*
        #[derive(Debug, Clone, Default, PartialEq)]
        pub(super) struct $name {
            $( $(#[doc = $doc])* pub(super) $key: Field<$type>, )*
        }

        impl $name {
            /// The keys of the table.
            pub(super) const KEYS: &'static [&'static str] = &[$(stringify!($key)),*];
        }

        impl Read for $name {
            const IS_TABLE: bool = true;

            fn expected() -> Cow<'static, str> {
                format!("a table with {}", all_of(Self::KEYS)).into()
            }

            fn read(
                value: &DeValue<'_>,
                span: &Range<usize>,
                problems: &mut Problems<'_>,
            ) -> Option<Self> {
                let mut out = Self::default();
                for (key, value) in table_of::<Self>(value, span, problems)? {
                    match key.get_ref().as_ref() {
                        $( stringify!($key) => out.$key = read_field(value, problems), )*
                        _ => unknown_key(key, $written, Self::KEYS, problems),
                    }
                }
                $( $(
                    let _: () = $required;
                    if out.$key.is_absent() {
                        missing_key::<$type>($written, stringify!($key), span, problems);
                    }
                )? )*
                Some(out)
            }
        }

        impl JsonSchema for $name {
            fn schema_name() -> Cow<'static, str> {
                stringify!($name).trim_start_matches("Raw").into()
            }

            fn json_schema(generator: &mut SchemaGenerator) -> Schema {
                let mut properties = serde_json::Map::new();
                $(
                    let mut schema = generator.subschema_for::<$type>();
                    schema.insert("description".into(), concat!($($doc),*).trim().into());
                    properties.insert(stringify!($key).into(), schema.into());
                )*
                let required: &[&str] =
                    &[$( $( { let _: () = $required; stringify!($key) }, )? )*];
                json_schema!({
                    "type": "object",
                    "description": concat!($($table_doc),*).trim(),
                    "properties": properties,
                    "required": required,
                    "additionalProperties": false,
                })
            }
        }
    };
}
pub(super) use table;
