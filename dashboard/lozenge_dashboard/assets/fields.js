// Native inputs with labels, fed by one state object; columns of controls are made of them.
// State comes from Python; what the user does goes back as messages.

const THIN = "\u202f";
const STEPS = 1000; // positions of a logarithmic slider
const PATIENCE = 2000; // ms after which an unanswered value is given up

function make(tag, attributes = {}, ...children) {
  const node = document.createElement(tag);
  for (const [key, value] of Object.entries(attributes)) {
    if (key.startsWith("on")) node.addEventListener(key.slice(2), value);
    else if (value === true) node.setAttribute(key, "");
    else if (value !== false && value != null) node.setAttribute(key, value);
  }
  node.append(...children.filter((child) => child != null));
  return node;
}

function button(text, hint, act, kind) {
  return make("button", { type: "button", title: hint, class: kind, onclick: act }, text);
}

// Gives the document the theme and the view with the room, and the theme's button its words.
function dress(button, page) {
  button.textContent = page.theme === "dark" ? "Light" : "Dark";
  button.title = `Changes to the ${page.theme === "dark" ? "light" : "dark"} colours.`;
  Object.assign(document.documentElement.dataset, { theme: page.theme, focus: page.focus || "none" });
}

function save(name, text) {
  const link = make("a", { href: URL.createObjectURL(new Blob([text], { type: "application/json" })), download: name });
  link.click();
  setTimeout(() => URL.revokeObjectURL(link.href), 10000);
}

function shown(value) {
  if (typeof value !== "number") return value ?? "";
  return String(Number(value.toPrecision(12)));
}

function spoken(value) {
  return Number.isInteger(value) ? String(value).replace(/\B(?=(\d{3})+$)/g, THIN) : shown(value);
}

// Latest value wins: while a slider is dragged, its next value is sent when the last one has been
// answered, so that a slow server or browser never works off a queue.
class Sender {
  constructor(model) {
    this.model = model;
    this.last = 0; // number of the newest message
    this.waiting = null;
    this.sent = null; // the dragged value that is not answered yet
    this.open = new Map(); // newest message about each control; its state is older until answered
  }

  send(message) {
    if (message.kind === "set") this.open.set(message.name, Infinity);
    if (message.settled === false) {
      if (this.sent && performance.now() - this.sent.time < PATIENCE) { this.waiting = message; return; }
      this.sent = { id: this.last + 1, time: performance.now() };
    } else if (this.waiting?.name === message.name) {
      this.waiting = null;
    }
    this.last += 1;
    if (message.kind === "set") this.open.set(message.name, this.last);
    this.model.send_msg({ ...message, id: this.last });
  }

  answered(id) {
    for (const [name, newest] of this.open) if (newest <= id) this.open.delete(name);
    if (!this.sent || id < this.sent.id) return;
    this.sent = null;
    const next = this.waiting;
    this.waiting = null;
    if (next) requestAnimationFrame(() => this.send(next));
  }
}

class Field {
  constructor(spec, sender) {
    this.spec = spec;
    this.send = (value, settled) => sender.send({ kind: "set", name: spec.name, value, settled });
    this.open = () => sender.open.has(spec.name);
    this.error = make("p", { class: "refusal", role: "alert", id: `${spec.name}-error`, hidden: true });
    this.reason = make("p", { class: "reason", id: `${spec.name}-reason`, hidden: true });
    this.mark = make("span", { class: "mark", hidden: true }, "●");
    this.name = make("span", {}, spec.label);
    this.dirty = false;
  }

  frame(...body) {
    const hint = make("span", { id: `${this.spec.name}-hint`, class: "unseen" }, this.spec.hint);
    this.node = make("div", { class: `field ${this.spec.kind}`, title: this.spec.hint }, ...body, hint, this.reason, this.error);
    return this.node;
  }

  describe(input) {
    input.setAttribute("aria-describedby", ["hint", "reason", "error"].map((p) => `${this.spec.name}-${p}`).join(" "));
    return input;
  }

  update(state) {
    this.node.hidden = state.hidden === true;
    this.node.classList.toggle("off", Boolean(state.disabled));
    this.reason.textContent = state.disabled || state.caution || state.note || "";
    this.reason.classList.toggle("caution", Boolean(!state.disabled && state.caution));
    this.reason.hidden = !this.reason.textContent;
    this.error.hidden = !state.error;
    this.error.textContent = state.error || "";
    this.mark.hidden = state.preset === undefined;
    this.mark.title = `the preset has ${spoken(state.preset)}`;
    this.mark.setAttribute("aria-label", `differs from the preset, which has ${spoken(state.preset)}`);
    for (const input of this.inputs) {
      input.disabled = Boolean(state.disabled);
      input.setAttribute("aria-invalid", state.error ? "true" : "false");
    }
  }
}

class NumberField extends Field {
  build() {
    const spec = this.spec;
    this.box = this.describe(make("input", {
      type: "text", inputmode: "decimal", id: `${spec.name}-box`, autocomplete: "off", spellcheck: "false", class: "box",
      oninput: () => { this.dirty = true; },
      onchange: () => this.typed(),
    }));
    this.inputs = [this.box];
    const label = make("label", { for: `${spec.name}-box` }, this.mark, this.name);
    this.unit = make("span", { class: "unit" }, spec.unit || "");
    return this.frame(make("div", { class: "line" }, label, this.box, this.unit), this.slider());
  }

  slider() { return null; }

  typed() {
    this.dirty = false;
    const text = this.box.value.replace(/[\s\u202f\u00a0]/g, "").replace(",", ".");
    const value = text !== "" && Number.isFinite(Number(text)) ? Number(text) : this.box.value;
    this.send(value, true);
  }

  update(state) {
    super.update(state);
    if (state.unit !== undefined) this.unit.textContent = state.unit;
    const held = this.dirty && this.box.matches(":focus");
    if (!held && !this.open() && !state.error) this.box.value = this.spec.whole ? spoken(state.value) : shown(state.value);
  }
}

class SliderField extends NumberField {
  slider() {
    const spec = this.spec;
    this.keyed = this.repeating = false;
    this.range = this.describe(make("input", {
      type: "range", id: `${spec.name}-range`, "aria-label": spec.label,
      oninput: () => { this.held = true; const v = this.value(); this.box.value = spec.whole ? spoken(v) : shown(v); this.speak(v); this.send(v, false); },
      onchange: () => { this.held = this.repeating = this.keyed; this.send(this.value(), !this.keyed); },
      onkeydown: (event) => { this.keyed = event.repeat; },
      onkeyup: () => this.rest(),
      onblur: () => { this.held = false; this.rest(); },
    }));
    this.inputs.push(this.range);
    return this.range;
  }

  // A key that is held down drags; the value settles when it is let go.
  rest() {
    this.keyed = false;
    if (!this.repeating) return;
    this.held = this.repeating = false;
    this.send(this.value(), true);
  }

  speak(value) {
    this.range.setAttribute("aria-valuetext", `${spoken(value)} ${this.spec.unit || ""}`);
    const span = this.range.max - this.range.min || 1;
    this.range.style.setProperty("--filled", `${(100 * (this.range.value - this.range.min)) / span}%`);
  }

  value() {
    const p = Number(this.range.value);
    if (!this.spec.log) return Number(p.toFixed(6));
    const exact = this.low * (this.high / this.low) ** (p / STEPS);
    if (p === STEPS) return this.high;
    const digits = 10 ** (Math.floor(Math.log10(exact)) - 2);
    return this.spec.whole ? Math.round(Math.round(exact / Math.max(digits, 1)) * Math.max(digits, 1)) : Number((Math.round(exact / digits) * digits).toPrecision(3));
  }

  update(state) {
    super.update(state);
    if (this.held || this.open()) return;
    [this.low, this.high] = [state.low, state.high];
    if (this.spec.log) {
      Object.assign(this.range, { min: 0, max: STEPS, step: 1 });
      this.range.value = Math.round((STEPS * Math.log(state.value / state.low)) / Math.log(state.high / state.low));
    } else {
      Object.assign(this.range, { min: state.low, max: state.high, step: this.spec.step });
      this.range.value = state.value;
    }
    this.speak(state.value);
  }
}

class ChoiceField extends Field {
  build() {
    const spec = this.spec;
    this.select = this.describe(make("select", { id: `${spec.name}-select`, onchange: () => this.send(this.select.value, true) },
      ...spec.options.map(([value, label]) => make("option", { value }, label))));
    this.inputs = [this.select];
    return this.frame(make("div", { class: "line" }, make("label", { for: `${spec.name}-select` }, this.mark, this.name), this.select));
  }

  update(state) {
    super.update(state);
    this.select.value = state.value;
    for (const option of this.select.options) {
      const why = state.closed?.[option.value];
      option.disabled = Boolean(why);
      option.title = why || "";
    }
  }
}

class RadioField extends Field {
  build() {
    const spec = this.spec;
    this.inputs = spec.options.map(([value]) => make("input", {
      type: "radio", name: `${spec.name}-radio`, value, onchange: () => this.send(value, true),
    }));
    this.labels = spec.options.map(([, label], i) => make("label", {}, this.inputs[i], make("span", {}, label)));
    const set = this.describe(make("div", { role: "radiogroup", "aria-label": spec.label, class: "radios" }, ...this.labels));
    return this.frame(make("div", { class: "line" }, make("span", { class: "label" }, this.mark, this.name)), set);
  }

  update(state) {
    super.update(state);
    this.inputs.forEach((input, i) => {
      const value = this.spec.options[i][0];
      const why = state.disabled || state.closed?.[value];
      input.checked = value === state.value;
      input.disabled = Boolean(why);
      this.labels[i].title = why || "";
    });
  }
}

const COLUMNS = [["t0", "t₀"], ["x0", "x₀"], ["half_width", "h"], ["boost", "boost"]];

class RegionsField extends Field {
  build() {
    this.body = make("tbody");
    this.inputs = [];
    this.act = (what) => this.send(what, true);
    this.toggle = make("button", { type: "button", onclick: () => this.send(this.rows === null ? "list" : "row", true) });
    this.add = make("button", { type: "button", onclick: () => this.send([...this.read(), null], true) }, "Add a region");
    this.table = make("table", {}, make("caption", { class: "unseen" }, "List of regions"),
      make("thead", {}, make("tr", {}, make("td"), ...COLUMNS.map(([, head]) => make("th", { scope: "col" }, head)), make("td"))), this.body);
    return this.frame(make("div", { class: "line" }, make("span", { class: "label" }, this.mark, this.name), this.toggle, this.add), this.table);
  }

  read() {
    return [...this.body.rows].map((row) => [...row.querySelectorAll("input")].map((input) => {
      const text = input.value.trim().replace(",", ".");
      return text !== "" && Number.isFinite(Number(text)) ? Number(text) : input.value;
    }));
  }

  row(values, i) {
    const letter = "ABCDEFGH"[i];
    const inputs = COLUMNS.map(([key], k) => make("input", {
      type: "text", inputmode: "decimal", autocomplete: "off", "aria-label": `${key} of region ${letter}`, value: shown(values[k]),
      oninput: () => { this.dirty = true; }, onchange: () => { this.dirty = false; this.send(this.read(), true); },
    }));
    const remove = make("button", { type: "button", "aria-label": `remove region ${letter}`,
      onclick: () => this.send(this.read().filter((_, k) => k !== i), true) }, "×");
    return make("tr", {}, make("th", { scope: "row", style: `--hue: var(--region-${i})` }, letter), ...inputs.map((input) => make("td", {}, input)), make("td", {}, remove));
  }

  update(state) {
    super.update(state);
    this.rows = state.value;
    this.toggle.textContent = this.rows === null ? "Edit as a list" : "Equal row";
    this.table.hidden = this.add.hidden = this.rows === null;
    if (this.rows === null || state.error || (this.dirty && this.body.contains(this.node.getRootNode().activeElement))) return;
    const focused = this.node.getRootNode().activeElement?.getAttribute("aria-label");
    this.body.replaceChildren(...this.rows.map((values, i) => this.row(values, i)));
    if (focused) this.body.querySelector(`[aria-label="${focused}"]`)?.focus();
    this.add.disabled = this.rows.length >= 8;
  }
}

const FIELDS = { number: NumberField, slider: SliderField, choice: ChoiceField, radio: RadioField, regions: RegionsField };
