// Small hands on the document: they change only what differs, so that a poll moves nothing on the
// page. Text goes in as text and never as markup.

/** The element with an id; a missing one is a fault of the page itself. */
export function byId(id) {
  const element = document.getElementById(id);
  if (!element) throw new Error(`the page has no #${id}`);
  return element;
}

/** Sets an element's text if it differs. */
export function setText(element, text) {
  if (element.textContent !== text) element.textContent = text;
}

/** Sets an attribute if it differs; `null` removes it. */
export function setAttribute(element, name, value) {
  if (value === null) {
    if (element.hasAttribute(name)) element.removeAttribute(name);
  } else if (element.getAttribute(name) !== value) {
    element.setAttribute(name, value);
  }
}

/** Shows or hides an element. */
export function setHidden(element, hidden) {
  if (element.hidden !== hidden) element.hidden = hidden;
}

/** A new element with a class, a text and children. */
export function make(tag, className = "", text = "", children = []) {
  const element = document.createElement(tag);
  if (className) element.className = className;
  if (text) element.textContent = text;
  element.append(...children);
  return element;
}

/** Makes a list hold exactly these texts, keeping the items that are there. */
export function setItems(list, texts) {
  while (list.children.length > texts.length) list.lastElementChild.remove();
  while (list.children.length < texts.length) list.append(document.createElement("li"));
  texts.forEach((text, index) => setText(list.children[index], text));
}
