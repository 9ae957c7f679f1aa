// The control column of the evidence page. The server puts fields.js before this text.

class SetField extends Field { // any of several
  build() {
    this.inputs = this.spec.options.map(([value]) => make("input", { type: "checkbox", value, onchange: () => this.changed() }));
    const labels = this.spec.options.map(([, label], i) => make("label", {}, this.inputs[i], make("span", {}, label)));
    const set = this.describe(make("div", { role: "group", "aria-label": this.spec.label, class: "radios two" }, ...labels));
    return this.frame(make("div", { class: "line" }, make("span", { class: "label" }, this.mark, this.name)), set);
  }

  changed() { this.send(this.inputs.filter((input) => input.checked).map((input) => input.value), true); }

  update(state) {
    super.update(state);
    this.inputs.forEach((input) => { input.checked = state.value.includes(input.value); });
  }
}

class StepField extends NumberField { // a whole number with its neighbours
  build() {
    const node = super.build();
    const step = (text, name, by) => make("button", { type: "button", "aria-label": `${name} ${this.spec.label}`, onclick: () => this.by(by) }, text);
    this.less = step("‹", "previous", -1);
    this.more = step("›", "next", 1);
    this.box.before(this.less);
    this.box.after(this.more);
    return node;
  }

  by(amount) {
    this.at = Math.max(1, this.at + amount);
    this.box.value = spoken(this.at);
    this.send(this.at, true);
  }

  update(state) {
    super.update(state);
    if (!this.open()) this.at = state.value;
    this.less.disabled = this.at <= 1;
  }
}

const KINDS = { ...FIELDS, set: SetField, step: StepField };

function head(act) {
  const parts = {
    sentence: make("p", { class: "sentence" }),
    theme: button("Dark", "", () => act("theme")),
    save: button("Save", "Downloads the bench's screen with these settings as a preset file.", () => act("save")),
    error: make("p", { class: "refusal", role: "alert" }),
  };
  const back = make("a", { class: "button", href: "/", title: "Opens the bench: one sprinkling and its six views." }, "Bench");
  parts.node = make("header", {}, make("h1", {}, "Evidence"), parts.sentence, make("div", { class: "buttons" }, back, parts.save, parts.theme), parts.error);
  return parts;
}

function updateHead(parts, page) {
  parts.sentence.textContent = page.sentence;
  parts.error.textContent = page.error;
  parts.error.hidden = !page.error;
  dress(parts.theme, page);
}

// The results file that slopes from data are read from.
function due(act) {
  const list = make("select", { id: "file-select", onchange: () => act("file", list.value) });
  const hint = "Results of a campaign over the density, from the folder of the server: slopes from data.";
  const note = make("p", { class: "reason" });
  const error = make("p", { class: "refusal", role: "alert" });
  const node = make("section", { class: "group", "aria-label": "What is it due to?" }, make("div", { class: "head" }, make("h2", {}, "What is it due to?")),
    make("div", { class: "field", title: hint }, make("div", { class: "line" }, make("label", { for: "file-select" }, "results file"), list)), note, error);
  return { list, note, error, node };
}

function updateDue(parts, state) {
  const text = JSON.stringify(state.names);
  if (text !== parts.text) {
    parts.text = text;
    parts.list.replaceChildren(...[["", "none"], ...state.names.map((name) => [name, name])].map(([value, label]) => make("option", { value, title: label }, label)));
  }
  parts.list.value = state.name;
  parts.note.textContent = state.note;
  parts.note.hidden = !state.note;
  parts.error.textContent = state.error;
  parts.error.hidden = !state.error;
}

function queue(act) {
  const text = make("span", { role: "status" });
  const halt = button("Cancel all", "Stops what runs and drops what waits; what is shown stays.", () => act("halt"));
  const all = button("Compute all", "Computes every view that does not show the present settings.", () => act("compute"));
  return { text, halt, all, node: make("div", { class: "bar", role: "group", "aria-label": "Computations" }, make("div", { class: "line" }, text, halt, all)) };
}

function updateQueue(parts, state) {
  parts.text.textContent = state.text;
  parts.halt.hidden = !state.busy;
  parts.all.hidden = !state.missing;
}

export function render({ model, el }) {
  const sender = new Sender(model);
  const act = (name, value = null) => sender.send({ kind: "act", name, value });
  const fields = new Map();
  const top = head(act);
  const column = make("div", { class: "column", "aria-label": "Evidence", role: "form" }, top.node);
  for (const spec of model.groups) {
    const body = spec.fields.map((field) => {
      const made = new KINDS[field.kind](field, sender);
      const node = made.build();
      fields.set(field.name, made);
      return node;
    });
    column.append(make("section", { class: "group", "aria-label": spec.title }, make("div", { class: "head" }, make("h2", {}, spec.title)), ...body));
  }
  const file = due(act);
  const works = queue(act);
  column.append(file.node, works.node);
  new Lost(column, "what is in a results file stays there, and the rest is computed again");
  const update = () => {
    const state = model.state;
    sender.answered(state.answered);
    for (const [name, field] of fields) field.update(state.fields[name]);
    updateHead(top, state.page);
    updateDue(file, state.due);
    updateQueue(works, state.queue);
  };
  model.on("state", update);
  model.on("msg:custom", (message) => { if (message.kind === "download") save(message.name, message.text); });
  update();
  el.append(column);
}
