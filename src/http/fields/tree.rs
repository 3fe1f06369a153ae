//! JSON in which every key is kept as it stood, the same one twice too.

use serde::de::{Deserialize, Deserializer, MapAccess, SeqAccess, Visitor};
use serde_json::Value;
use std::collections::HashSet;
use std::fmt;

/// A value with all that stands in it.
pub(super) enum Node {
    /// Members in their order.
    Object(Vec<(String, Node)>),
    /// Items in their order.
    Array(Vec<Node>),
    /// Anything else.
    Scalar(Value),
}

impl Node {
    /// Whether a key stands more than once in one of its objects.
    pub fn repeats(&self) -> bool {
        match self {
            Node::Object(members) => {
                let keys: HashSet<&str> = members.iter().map(|(key, _)| key.as_str()).collect();
                keys.len() < members.len() || members.iter().any(|(_, node)| node.repeats())
            }
            Node::Array(items) => items.iter().any(Node::repeats),
            Node::Scalar(_) => false,
        }
    }

    /// As serde knows it.
    pub fn into_value(self) -> Value {
        match self {
            Node::Object(members) => {
                let members = members.into_iter();
                Value::Object(
                    members
                        .map(|(key, node)| (key, node.into_value()))
                        .collect(),
                )
            }
            Node::Array(items) => items.into_iter().map(Node::into_value).collect(),
            Node::Scalar(value) => value,
        }
    }
}

impl<'de> Deserialize<'de> for Node {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        deserializer.deserialize_any(Keep)
    }
}

/// Keeps what comes.
struct Keep;

impl<'de> Visitor<'de> for Keep {
    type Value = Node;

    fn expecting(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("JSON")
    }

    fn visit_bool<E>(self, value: bool) -> Result<Node, E> {
        Ok(Node::Scalar(value.into()))
    }

    fn visit_i64<E>(self, value: i64) -> Result<Node, E> {
        Ok(Node::Scalar(value.into()))
    }

    fn visit_u64<E>(self, value: u64) -> Result<Node, E> {
        Ok(Node::Scalar(value.into()))
    }

    fn visit_f64<E>(self, value: f64) -> Result<Node, E> {
        Ok(Node::Scalar(value.into()))
    }

    fn visit_str<E>(self, value: &str) -> Result<Node, E> {
        Ok(Node::Scalar(value.into()))
    }

    fn visit_unit<E>(self) -> Result<Node, E> {
        Ok(Node::Scalar(Value::Null))
    }

    fn visit_seq<A: SeqAccess<'de>>(self, mut items: A) -> Result<Node, A::Error> {
        let mut kept = Vec::new();
        while let Some(item) = items.next_element()? {
            kept.push(item);
        }
        Ok(Node::Array(kept))
    }

    fn visit_map<A: MapAccess<'de>>(self, mut members: A) -> Result<Node, A::Error> {
        let mut kept = Vec::new();
        while let Some(member) = members.next_entry()? {
            kept.push(member);
        }
        Ok(Node::Object(kept))
    }
}
