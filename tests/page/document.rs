//! What stands in the document that the browser wrote out: the cells of the sheet and the words
//! that matter. A browser writes a document in one form only; no other markup is understood here.

use std::collections::BTreeMap;

/// One channel as it is drawn.
#[derive(Debug)]
pub(crate) struct Cell {
    pub(crate) state: String,
    pub(crate) protected: bool,
    pub(crate) offered: bool,
}

pub(crate) struct Document {
    text: String,
    pub(crate) cells: BTreeMap<String, Cell>,
}

impl Document {
    pub(crate) fn read(text: &str) -> Document {
        let cells = tags(text, "button")
            .filter_map(|(tag, rest)| {
                let id = attribute(tag, "data-channel")?;
                let (swatch, _) = tags(rest, "i").next().expect("a cell has a swatch");
                let classes = attribute(swatch, "class").expect("a swatch has classes");
                let has = |class| classes.split(' ').any(|each| each == class);
                let state = attribute(swatch, "data-state").expect("a swatch has a state");
                let cell = Cell {
                    state: state.to_string(),
                    protected: has("protected"),
                    offered: has("offered"),
                };
                Some((id.to_string(), cell))
            })
            .collect();
        Document { text: text.to_string(), cells }
    }

    /// Whether the page holds its picture for current.
    pub(crate) fn feed(&self) -> &str {
        let (tag, _) = tags(&self.text, "html").next().expect("a document");
        attribute(tag, "data-feed").expect("the page says how current it is")
    }

    /// The node's time in the answer that the sheet shows.
    pub(crate) fn answered(&self) -> &str {
        attribute(self.element("bands").0, "data-answered").expect("the sheet is current")
    }

    /// The node's time in the answer that the offers show.
    pub(crate) fn offers_answered(&self) -> &str {
        attribute(self.element("offers").0, "data-answered").expect("the offers are current")
    }

    /// The text of an element that holds nothing but text.
    pub(crate) fn text_of(&self, id: &str) -> &str {
        let (_, rest) = self.element(id);
        rest.split('<').next().unwrap_or_default()
    }

    /// Channels in the list of offers, in its order.
    pub(crate) fn listed_offers(&self) -> Vec<String> {
        let (_, rest) = self.element("offers");
        let list = rest.split("</tbody>").next().unwrap_or_default();
        tags(list, "button")
            .map(|(_, rest)| rest.split('<').next().unwrap_or_default().to_string())
            .filter(|id| !id.is_empty())
            .collect()
    }

    /// The tag of an element, and all that follows it.
    fn element(&self, id: &str) -> (&str, &str) {
        let name = format!(" id=\"{id}\"");
        let at = self.text.find(&name).unwrap_or_else(|| panic!("no #{id} on the page"));
        let start = self.text[..at].rfind('<').expect("an attribute stands in a tag");
        let end = at + self.text[at..].find('>').expect("a tag ends");
        (&self.text[start..end], &self.text[end + 1..])
    }
}

/// Every opening tag of a name, with all that follows it.
fn tags<'a>(text: &'a str, name: &str) -> impl Iterator<Item = (&'a str, &'a str)> {
    let open = format!("<{name} ");
    text.match_indices(&open).map(|(at, _)| at).collect::<Vec<_>>().into_iter().map(move |at| {
        let end = at + text[at..].find('>').expect("a tag ends");
        (&text[at..end], &text[end + 1..])
    })
}

fn attribute<'a>(tag: &'a str, name: &str) -> Option<&'a str> {
    let (_, rest) = tag.split_once(&format!(" {name}=\""))?;
    rest.split('"').next()
}
