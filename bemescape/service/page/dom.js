// Elements, messages and small timers.

/** An element: h("p", {class: "soft", onclick: f}, "text", child). Text is always text, never markup. */
export function h(tag, attributes = {}, ...children) {
  const element = document.createElement(tag);
  for (const [key, value] of Object.entries(attributes)) {
    if (value === undefined || value === null || value === false) continue;
    if (key.startsWith("on")) element.addEventListener(key.slice(2), value);
    else if (key in element && key !== "list" && typeof value !== "string") element[key] = value;
    else if (key === "value") element.value = value;
    else element.setAttribute(key, value === true ? "" : value);
  }
  element.append(...children.flat().filter((child) => child !== null && child !== undefined && child !== false));
  return element;
}

/** The same for a drawing; attributes are text. */
export function svg(tag, attributes = {}, ...children) {
  const element = document.createElementNS("http://www.w3.org/2000/svg", tag);
  for (const [key, value] of Object.entries(attributes)) element.setAttribute(key, String(value));
  element.append(...children.flat());
  return element;
}

export const byId = (id) => document.getElementById(id);

let hiding = 0;
/** One sentence for the reader; a refusal stays until the next one. */
export function say(text, { bad = false } = {}) {
  const place = byId("message");
  clearTimeout(hiding);
  place.textContent = text;
  place.classList.toggle("bad", bad);
  if (text) hiding = setTimeout(() => { place.textContent = ""; }, bad ? 12000 : 4000);
}

/** The last call after a pause. */
export function later(action, pause) {
  let timer = 0;
  return (...values) => { clearTimeout(timer); timer = setTimeout(() => action(...values), pause); };
}

export function labelled(text, control) {
  return h("label", {}, text, control);
}

export function choice(options, value, onchange) {
  return h("select", { onchange }, options.map(([key, text]) => h("option", { value: key, selected: key === value }, text)));
}
