//! How the shared words are written into the record's JSON: times and spans in microseconds, qualities as their code.

pub(crate) mod time {
    use hushwatch_quantity::Time;
    use serde::{Deserialize, Deserializer, Serializer};

    #[expect(clippy::trivially_copy_pass_by_ref, reason = "serde calls it with a reference")]
    pub(crate) fn serialize<S: Serializer>(time: &Time, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_i64(time.as_micros())
    }

    pub(crate) fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Time, D::Error> {
        i64::deserialize(deserializer).map(Time::from_micros)
    }
}

pub(crate) mod span {
    use hushwatch_quantity::Span;
    use serde::{Deserialize, Deserializer, Serializer};

    #[expect(clippy::trivially_copy_pass_by_ref, reason = "serde calls it with a reference")]
    pub(crate) fn serialize<S: Serializer>(span: &Span, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_i64(span.as_micros())
    }

    pub(crate) fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Span, D::Error> {
        i64::deserialize(deserializer).map(Span::from_micros)
    }
}

pub(crate) mod quality {
    use hushwatch_quantity::Quality;
    use serde::{Deserialize, Deserializer, Serializer, de::Error};

    #[expect(clippy::trivially_copy_pass_by_ref, reason = "serde calls it with a reference")]
    pub(crate) fn serialize<S: Serializer>(quality: &Quality, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.serialize_i64(quality.code())
    }

    pub(crate) fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Quality, D::Error> {
        let code = i64::deserialize(deserializer)?;
        Quality::from_code(code).ok_or_else(|| D::Error::custom(format_args!("{code} is not the code of a quality")))
    }
}
