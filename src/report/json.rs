//! JSON text from any serialisable value: key order kept, figures rounded by their key, NaN refused.
//!
//! The usual writer turns NaN into `null` in silence and knows no keys when it meets a number; both would break the
//! promise that every figure is right or said to be unknown.

use serde::ser::{self, Serialize, Serializer};

use super::ReportError;
use super::figures::push_figure;

/// The struct name under which `serde_json` hands over a number of any length.
const BIG_NUMBER: &str = "$serde_json::private::Number";

/// Returns a value as JSON on one line; `key` is the key it will stand under and decides how a bare figure is rounded.
///
/// # Errors
/// `NotFinite` with the key of a NaN or an infinity; `Serialize` for what JSON cannot express.
///
/// # Examples
/// ```
/// assert_eq!(thornmap::report::json_text("level_dbc", &Some(-56.380012)).unwrap(), "-56.38");
/// assert!(thornmap::report::json_text("level_dbc", &f64::NAN).is_err());
/// ```
pub fn json_text<T: Serialize + ?Sized>(key: &str, value: &T) -> Result<String, ReportError> {
    let mut writer = Writer { out: String::new(), key: key.to_owned() };
    value.serialize(&mut writer)?;
    Ok(writer.out)
}

impl ser::Error for ReportError {
    fn custom<T: std::fmt::Display>(message: T) -> Self {
        Self::Serialize { key: "a value".to_owned(), found: message.to_string() }
    }
}

struct Writer {
    out: String,
    /// Key of the value that comes next.
    key: String,
}

impl Writer {
    fn string(&mut self, text: &str) {
        self.out.push('"');
        let mut rest = text;
        // Stretches without anything to escape are copied whole; what is escaped is one byte each.
        while let Some(at) = rest.bytes().position(|byte| byte < b' ' || byte == b'"' || byte == b'\\') {
            self.out.push_str(&rest[..at]);
            match rest.as_bytes()[at] {
                b'"' => self.out.push_str("\\\""),
                b'\\' => self.out.push_str("\\\\"),
                b'\n' => self.out.push_str("\\n"),
                b'\r' => self.out.push_str("\\r"),
                b'\t' => self.out.push_str("\\t"),
                byte => self.out.push_str(&format!("\\u{byte:04x}")),
            }
            rest = &rest[at + 1..];
        }
        self.out.push_str(rest);
        self.out.push('"');
    }

    fn open<'a>(&'a mut self, bracket: char, close: &'static str) -> Compound<'a> {
        self.out.push(bracket);
        let key = self.key.clone();
        Compound { writer: self, key, first: true, close }
    }

    fn variant(&mut self, variant: &str) {
        self.out.push('{');
        self.string(variant);
        self.out.push(':');
        variant.clone_into(&mut self.key);
    }
}

/// A list or an object that is being written.
struct Compound<'a> {
    writer: &'a mut Writer,
    /// Key of the whole: elements of a list are rounded by it.
    key: String,
    first: bool,
    close: &'static str,
}

impl Compound<'_> {
    fn comma(&mut self) {
        if !self.first {
            self.writer.out.push(',');
        }
        self.first = false;
    }

    fn element<T: Serialize + ?Sized>(&mut self, value: &T) -> Result<(), ReportError> {
        self.comma();
        self.writer.key.clone_from(&self.key);
        value.serialize(&mut *self.writer)
    }

    fn member<T: Serialize + ?Sized>(&mut self, key: &str, value: &T) -> Result<(), ReportError> {
        self.comma();
        self.writer.string(key);
        self.writer.out.push(':');
        key.clone_into(&mut self.writer.key);
        value.serialize(&mut *self.writer)
    }

    fn finish(self) {
        self.writer.out.push_str(self.close);
    }
}

macro_rules! plain {
    ($($method:ident: $type:ty),*) => {$(
        fn $method(self, value: $type) -> Result<(), ReportError> {
            self.out.push_str(&value.to_string());
            Ok(())
        }
    )*};
}

impl<'a> Serializer for &'a mut Writer {
    type Ok = ();
    type Error = ReportError;
    type SerializeSeq = Compound<'a>;
    type SerializeTuple = Compound<'a>;
    type SerializeTupleStruct = Compound<'a>;
    type SerializeTupleVariant = Compound<'a>;
    type SerializeMap = Compound<'a>;
    type SerializeStruct = Compound<'a>;
    type SerializeStructVariant = Compound<'a>;

    plain!(serialize_bool: bool, serialize_i8: i8, serialize_i16: i16, serialize_i32: i32, serialize_i64: i64,
        serialize_i128: i128, serialize_u8: u8, serialize_u16: u16, serialize_u32: u32, serialize_u64: u64,
        serialize_u128: u128);

    fn serialize_f32(self, value: f32) -> Result<(), ReportError> {
        self.serialize_f64(f64::from(value))
    }

    fn serialize_f64(self, value: f64) -> Result<(), ReportError> {
        push_figure(&mut self.out, &self.key, value)
    }

    fn serialize_char(self, value: char) -> Result<(), ReportError> {
        self.string(&value.to_string());
        Ok(())
    }

    fn serialize_str(self, value: &str) -> Result<(), ReportError> {
        self.string(value);
        Ok(())
    }

    fn serialize_bytes(self, value: &[u8]) -> Result<(), ReportError> {
        value.serialize(self)
    }

    fn serialize_none(self) -> Result<(), ReportError> {
        self.serialize_unit()
    }

    fn serialize_some<T: Serialize + ?Sized>(self, value: &T) -> Result<(), ReportError> {
        value.serialize(self)
    }

    fn serialize_unit(self) -> Result<(), ReportError> {
        self.out.push_str("null");
        Ok(())
    }

    fn serialize_unit_struct(self, _: &'static str) -> Result<(), ReportError> {
        self.serialize_unit()
    }

    fn serialize_unit_variant(self, _: &'static str, _: u32, variant: &'static str) -> Result<(), ReportError> {
        self.serialize_str(variant)
    }

    fn serialize_newtype_struct<T: Serialize + ?Sized>(self, _: &'static str, value: &T) -> Result<(), ReportError> {
        value.serialize(self)
    }

    fn serialize_newtype_variant<T: Serialize + ?Sized>(
        self,
        _: &'static str,
        _: u32,
        variant: &'static str,
        value: &T,
    ) -> Result<(), ReportError> {
        self.variant(variant);
        value.serialize(&mut *self)?;
        self.out.push('}');
        Ok(())
    }

    fn serialize_seq(self, _: Option<usize>) -> Result<Compound<'a>, ReportError> {
        Ok(self.open('[', "]"))
    }

    fn serialize_tuple(self, _: usize) -> Result<Compound<'a>, ReportError> {
        Ok(self.open('[', "]"))
    }

    fn serialize_tuple_struct(self, _: &'static str, _: usize) -> Result<Compound<'a>, ReportError> {
        Ok(self.open('[', "]"))
    }

    fn serialize_tuple_variant(
        self,
        _: &'static str,
        _: u32,
        variant: &'static str,
        _: usize,
    ) -> Result<Compound<'a>, ReportError> {
        self.variant(variant);
        Ok(self.open('[', "]}"))
    }

    fn serialize_map(self, _: Option<usize>) -> Result<Compound<'a>, ReportError> {
        Ok(self.open('{', "}"))
    }

    fn serialize_struct(self, name: &'static str, _: usize) -> Result<Compound<'a>, ReportError> {
        if name == BIG_NUMBER {
            let key = self.key.clone();
            return Ok(Compound { writer: self, key, first: true, close: "" });
        }
        Ok(self.open('{', "}"))
    }

    fn serialize_struct_variant(
        self,
        _: &'static str,
        _: u32,
        variant: &'static str,
        _: usize,
    ) -> Result<Compound<'a>, ReportError> {
        self.variant(variant);
        Ok(self.open('{', "}}"))
    }
}

macro_rules! list {
    ($($trait:ident $method:ident),*) => {$(
        impl ser::$trait for Compound<'_> {
            type Ok = ();
            type Error = ReportError;
            fn $method<T: Serialize + ?Sized>(&mut self, value: &T) -> Result<(), ReportError> {
                self.element(value)
            }
            fn end(self) -> Result<(), ReportError> {
                self.finish();
                Ok(())
            }
        }
    )*};
}
list!(SerializeSeq serialize_element, SerializeTuple serialize_element, SerializeTupleStruct serialize_field,
    SerializeTupleVariant serialize_field);

impl ser::SerializeStruct for Compound<'_> {
    type Ok = ();
    type Error = ReportError;
    fn serialize_field<T: Serialize + ?Sized>(&mut self, key: &'static str, value: &T) -> Result<(), ReportError> {
        if key == BIG_NUMBER {
            // The digits arrive as a string: written without quotes they are the number itself.
            let text = json_text(key, value)?;
            self.writer.out.push_str(text.trim_matches('"'));
            return Ok(());
        }
        self.member(key, value)
    }
    fn end(self) -> Result<(), ReportError> {
        self.finish();
        Ok(())
    }
}

impl ser::SerializeStructVariant for Compound<'_> {
    type Ok = ();
    type Error = ReportError;
    fn serialize_field<T: Serialize + ?Sized>(&mut self, key: &'static str, value: &T) -> Result<(), ReportError> {
        self.member(key, value)
    }
    fn end(self) -> Result<(), ReportError> {
        self.finish();
        Ok(())
    }
}

impl ser::SerializeMap for Compound<'_> {
    type Ok = ();
    type Error = ReportError;
    fn serialize_key<T: Serialize + ?Sized>(&mut self, key: &T) -> Result<(), ReportError> {
        self.comma();
        let text = json_text("key", key)?;
        if text.starts_with('"') {
            self.writer.out.push_str(&text);
            self.writer.key = text.trim_matches('"').to_owned();
        } else {
            self.writer.string(&text);
            self.writer.key = text;
        }
        self.writer.out.push(':');
        Ok(())
    }
    fn serialize_value<T: Serialize + ?Sized>(&mut self, value: &T) -> Result<(), ReportError> {
        value.serialize(&mut *self.writer)
    }
    fn end(self) -> Result<(), ReportError> {
        self.finish();
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use std::collections::BTreeMap;

    use serde::Serialize;

    use super::*;

    #[derive(Serialize)]
    enum Shape {
        Empty,
        One(f64),
        Two(f64, f64),
        Named { level_dbc: f64, text: &'static str },
    }

    #[test]
    fn writes_every_shape_as_the_usual_writer_does() {
        let values = vec![
            Shape::Empty,
            Shape::One(1.5),
            Shape::Two(-2.25, 3.0),
            Shape::Named { level_dbc: -60.5, text: "a\"b\\c\n\u{1}\u{202e}\u{1f335}" },
        ];
        let map = BTreeMap::from([(-3, Some(12u64)), (4, None)]);
        let ours = json_text("x", &(values, &map, (), 'c', true, "s")).unwrap();
        let theirs = serde_json::json!([
            ["Empty", {"One": 1.5}, {"Two": [-2.25, 3]}, {"Named": {"level_dbc": -60.5, "text": "a\"b\\c\n\u{1}\u{202e}\u{1f335}"}}],
            {"-3": 12, "4": null}, null, "c", true, "s"
        ]);
        assert_eq!(serde_json::from_str::<serde_json::Value>(&ours).unwrap(), theirs);
    }

    #[test]
    fn keeps_integers_of_any_length() {
        let digits = "4700000000000000000001470000000000000000000147";
        let number: serde_json::Number = digits.parse().unwrap();
        assert_eq!(json_text("period", &number).unwrap(), digits);
        assert_eq!(json_text("p", &i128::MIN).unwrap(), i128::MIN.to_string());
    }

    #[test]
    fn names_the_key_of_a_figure_that_is_not_finite() {
        let error = json_text("x", &vec![Shape::Named { level_dbc: f64::NAN, text: "" }]).unwrap_err();
        assert!(matches!(error, ReportError::NotFinite { key, .. } if key == "level_dbc"));
    }

    #[test]
    fn rounds_list_elements_by_the_key_of_the_list() {
        #[derive(Serialize)]
        struct Curve {
            level_dbc: Vec<f64>,
            after_s: f64,
        }
        let text = json_text("x", &Curve { level_dbc: vec![-1.000_04, 2.0], after_s: 1.0 / 3.0 }).unwrap();
        assert_eq!(text, r#"{"level_dbc":[-1,2],"after_s":0.3333333333}"#);
    }
}
