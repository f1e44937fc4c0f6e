//! JSON Schema of the spec, for editors; made from the same tables that read it.

use super::raw::RawSpec;

/// JSON Schema (draft 2020-12) of a spec file.
#[must_use]
pub fn schema() -> serde_json::Value {
    let mut schema = schemars::schema_for!(RawSpec);
    schema.insert("title".into(), "thalweg spec".into());
    schema.to_value()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_table_lists_its_keys_and_takes_no_others() {
        let schema = schema();
        let properties = schema["properties"].as_object().expect("an object");
        for key in RawSpec::KEYS {
            assert!(properties[*key]["description"].is_string(), "{key}");
        }
        assert_eq!(schema["additionalProperties"], false);
        assert_eq!(schema["required"], serde_json::json!(["molecule", "level"]));
        for (name, table) in schema["$defs"].as_object().expect("an object") {
            if table["properties"].is_object() {
                assert_eq!(table["additionalProperties"], false, "{name}");
            }
        }
        let level = &schema["$defs"]["Level"];
        assert_eq!(
            level["properties"]["method"]["enum"],
            serde_json::json!(["rhf", "uhf"])
        );
        assert_eq!(level["required"], serde_json::json!(["method", "basis"]));
    }
}
