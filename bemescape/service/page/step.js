// A numbered step: a heading that opens and closes its body.
import { byId, h } from "./dom.js";

export class Step {
  constructor(id, number, title) {
    this.place = byId(id);
    this.said = h("span", { class: "said" });
    this.body = h("div", { class: "body", id: `${id}-body` });
    this.button = h("button", { type: "button", "aria-expanded": "false", "aria-controls": `${id}-body`, onclick: () => this.open(this.body.hidden) },
      h("span", { class: "number", "aria-hidden": "true" }, String(number)), h("span", { id: `${id}-title` }, title), this.said);
    this.place.replaceChildren(h("h2", {}, this.button), this.body);
    this.open(false);
  }

  open(wanted = true) {
    if (this.place.classList.contains("locked")) wanted = false;
    this.body.hidden = !wanted;
    this.button.setAttribute("aria-expanded", String(wanted));
  }

  /** What is said beside the title; whether the step is done; whether it waits for the one before. */
  state(text, { done = false, locked = false } = {}) {
    this.said.textContent = text;
    this.place.classList.toggle("done", done);
    this.place.classList.toggle("locked", locked);
    this.button.disabled = locked;
    if (locked) this.open(false);
  }

  show(...content) { this.body.replaceChildren(...content.flat().filter(Boolean)); }
}
