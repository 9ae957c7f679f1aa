// The control column of the campaign page. The server puts fields.js before this text.

class TextField extends NumberField { // a line of text
  build() {
    const node = super.build();
    if (this.spec.name === "file") this.box.addEventListener("input", () => this.send(this.box.value, false));
    this.box.addEventListener("blur", () => this.showEnd());
    return node;
  }

  typed() {
    this.dirty = false;
    this.send(this.box.value, true);
  }

  showEnd() { this.box.scrollLeft = this.box.scrollWidth; } // names differ there

  update(state) {
    super.update(state);
    this.box.title = this.box.value;
    if (!this.box.matches(":focus")) requestAnimationFrame(() => { if (!this.box.matches(":focus")) this.showEnd(); });
  }
}

class PlacementsField extends Field {
  build() {
    this.body = make("tbody");
    this.inputs = [];
    this.add = make("button", { type: "button", title: "Adds a placement class: another shift of all regions.", onclick: () => this.send([...this.read(), this.next()], true) }, "Add");
    this.table = make("table", {}, make("caption", { class: "unseen" }, "Shifts of all regions"),
      make("thead", {}, make("tr", {}, make("th", { scope: "col" }, "shift t"), make("th", { scope: "col" }, "shift x"), make("td"))), this.body);
    return this.frame(make("div", { class: "line" }, make("span", { class: "label" }, this.name), this.add), this.table);
  }

  read() {
    return [...this.body.rows].map((row) => [...row.querySelectorAll("input")].map((input) => {
      const text = input.value.trim().replace(",", ".").replace("−", "-");
      return text !== "" && Number.isFinite(Number(text)) ? Number(text) : input.value;
    }));
  }

  next() {
    const taken = this.read().map(([, x]) => Number(x) || 0);
    return [0, Number((Math.max(0, ...taken) + 0.1).toFixed(6))];
  }

  row([t, x], i) {
    const box = (name, value) => make("input", {
      type: "text", inputmode: "decimal", autocomplete: "off", "aria-label": `shift ${name} of placement ${i + 1}`, value: shown(value),
      oninput: () => { this.dirty = true; }, onchange: () => { this.dirty = false; this.send(this.read(), true); },
    });
    const remove = make("button", { type: "button", "aria-label": `remove placement ${i + 1}`, disabled: this.count < 2,
      onclick: () => this.send(this.read().filter((_, k) => k !== i), true) }, "×");
    return make("tr", {}, make("td", {}, box("t", t)), make("td", {}, box("x", x)), make("td", {}, remove));
  }

  update(state) {
    super.update(state);
    const root = this.node.getRootNode();
    if (this.dirty && this.body.contains(root.activeElement)) return;
    const text = JSON.stringify(state.value);
    if (text === this.text) return;
    this.text = text;
    this.count = state.value.length;
    const focused = root.activeElement?.getAttribute?.("aria-label");
    this.body.replaceChildren(...state.value.map((shift, i) => this.row(shift, i)));
    if (focused) this.body.querySelector(`[aria-label="${focused}"]`)?.focus();
    this.add.disabled = this.count >= 16;
  }
}

const KINDS = { ...FIELDS, text: TextField, placements: PlacementsField };

function head(act) {
  const parts = {
    title: make("h1", {}, "Campaign"),
    sentence: make("p", { class: "sentence" }),
    back: make("a", { class: "button", href: "/", title: "Opens the bench: one sprinkling and its six views." }, "Bench"),
    theme: button("Dark", "", () => act("theme")),
    error: make("p", { class: "refusal", role: "alert" }),
  };
  parts.node = make("header", {}, parts.title, parts.sentence, make("div", { class: "buttons" }, parts.back, parts.theme), parts.error);
  return parts;
}

function updateHead(parts, page) {
  parts.sentence.textContent = page.sentence;
  parts.error.textContent = page.error;
  parts.error.hidden = !page.error;
  dress(parts.theme, page);
  const address = new URL(location.href);
  if (page.file && address.searchParams.get("file") !== page.file) {
    address.searchParams.set("file", page.file);
    history.replaceState(null, "", address);
  }
}

const SUFFIX = ".sqlite";
const LONGEST = 22; // characters of a name that the list shows

// A name short enough for the list; the middle goes, since names differ at the end.
function cut(name, longest) {
  const bare = name.endsWith(SUFFIX) ? name.slice(0, -SUFFIX.length) : name;
  return bare.length <= longest ? bare : `${bare.slice(0, 4)}…${bare.slice(5 - longest)}`;
}

// The results file that is shown: chosen from the folder's, run, paused, changed.
function opened(act, fields, sender, specs) {
  const parts = {
    list: make("select", { "aria-label": "Results files of this folder" }),
    open: button("Open", "Shows a results file; whether it runs does not change.", () => act("open", parts.list.value)),
    status: make("p", { role: "status" }),
    error: make("p", { class: "refusal", role: "alert" }),
    pause: button("Pause", "Stops after what is recorded; it goes on later without losing a sample.", () => act("pause")),
    resume: button("Resume", "Goes on where it stopped, with the workers chosen below.", () => act("resume"), "primary"),
    why: make("p", { class: "reason" }),
    more: button("More realisations", "Goes on with the numbers typed here; what is finished stays.", () => act("more")),
    adopt: button("Use its preset", "Takes the preset inside the file for the new campaign below.", () => act("adopt")),
  };
  const made = specs.map((spec) => {
    const field = new KINDS[spec.kind](spec, sender);
    const node = field.build();
    fields.set(spec.name, field);
    return node;
  });
  parts.body = make("div", {}, parts.status, ...made, make("div", { class: "buttons" }, parts.pause, parts.resume, parts.more, parts.adopt), parts.why);
  parts.node = make("section", { class: "group", "aria-label": "Results file" }, make("div", { class: "head" }, make("h2", {}, "Results file")),
    make("div", { class: "line" }, parts.list, parts.open), parts.error, parts.body);
  return parts;
}

function updateOpened(parts, state) {
  const names = state.names.length ? state.names : [""];
  const text = JSON.stringify([names, state.running]);
  if (text !== parts.text) {
    const held = parts.list.value;
    parts.list.replaceChildren(...names.map((name) => make("option", { value: name, title: name }, name ? cut(name, LONGEST - (state.running.includes(name) ? 9 : 0)) + (state.running.includes(name) ? " (running)" : "") : "none in this folder yet")));
    if (names.includes(held)) parts.list.value = held;
    parts.text = text;
  }
  if (state.name !== parts.shown) { parts.shown = state.name; if (names.includes(state.name)) parts.list.value = state.name; }
  parts.list.title = parts.list.value;
  parts.list.disabled = parts.open.disabled = !state.names.length;
  parts.error.textContent = state.error;
  parts.error.hidden = !state.error;
  parts.body.hidden = !state.name;
  parts.status.textContent = state.text;
  parts.status.hidden = !state.text;
  const why = state.can_more ? "" : state.touched ? state.why_more : state.running.includes(state.name) ? "" : state.why_resume;
  parts.why.textContent = why;
  parts.why.hidden = !why;
  parts.pause.disabled = !state.can_pause;
  parts.resume.disabled = !state.can_resume;
  parts.more.disabled = !state.can_more;
  parts.resume.classList.toggle("primary", state.can_resume);
  for (const name of ["pause", "resume", "more"]) {
    const on = !parts[name].disabled;
    parts.hints ??= { pause: parts.pause.title, resume: parts.resume.title, more: parts.more.title };
    parts[name].title = on ? parts.hints[name] : { pause: "it does not run on this server", resume: state.why_resume, more: state.why_more }[name];
  }
}

function prediction(act) {
  const parts = {
    text: make("p", { role: "status" }), note: make("p", { class: "caution" }), shared: make("p", { class: "reason" }), error: make("p", { class: "refusal", role: "alert" }),
    rows: make("ul"), each: make("details", {}, make("summary", {}, "each density")),
    left: make("ul"), out: make("details", { class: "caution" }), outTitle: make("summary"),
    start: button("Start", "Makes the results file and runs the campaign on this server; closing the page changes nothing.", () => act("start"), "primary"),
    why: make("p", { class: "reason" }), brief: make("span"), failed: make("p", { class: "refusal", role: "alert" }),
  };
  parts.bar = make("div", { class: "bar", role: "group", "aria-label": "Start the new campaign" }, make("div", { class: "line" }, parts.brief, parts.start), parts.why, parts.failed, parts.shared);
  parts.each.append(parts.rows);
  parts.out.append(parts.outTitle, parts.left);
  parts.node = make("section", { class: "group", "aria-label": "Prediction" }, make("div", { class: "head" }, make("h2", {}, "Predicted")),
    parts.text, parts.note, parts.error, parts.each, parts.out);
  return parts;
}

function updatePrediction(parts, state, start) {
  const list = (node, lines) => node.replaceChildren(...lines.map((line) => make("li", {}, line)));
  parts.text.textContent = state.text;
  parts.text.classList.toggle("older", state.older);
  parts.note.textContent = state.note;
  parts.shared.textContent = state.shared;
  parts.error.textContent = state.error;
  parts.failed.textContent = state.failed;
  parts.brief.textContent = `New: ${state.brief || "…"}`;
  parts.brief.classList.toggle("older", state.older);
  for (const name of ["note", "error", "text", "shared", "failed"]) parts[name].hidden = !parts[name].textContent;
  list(parts.rows, state.rows);
  parts.each.hidden = !state.rows.length;
  list(parts.left, state.left_out);
  parts.out.hidden = !state.left_out.length;
  parts.outTitle.textContent = `${state.left_out.length} left out, and why`;
  parts.start.disabled = Boolean(start);
  parts.why.textContent = start;
  parts.why.hidden = !start;
}

export function render({ model, el }) {
  const sender = new Sender(model);
  const act = (name, value = null) => sender.send({ kind: "act", name, value });
  const fields = new Map();
  const top = head(act);
  const file = opened(act, fields, sender, model.more);
  const column = make("div", { class: "column", "aria-label": "Campaign", role: "form" }, top.node, file.node);
  column.append(make("h2", { class: "part" }, "New campaign"));
  for (const spec of model.groups) {
    const body = spec.fields.map((field) => {
      const made = new KINDS[field.kind](field, sender);
      const node = made.build();
      fields.set(field.name, made);
      return node;
    });
    column.append(make("section", { class: "group", "aria-label": spec.title }, make("div", { class: "head" }, make("h2", {}, spec.title)), ...body));
  }
  const forecast = prediction(act);
  column.append(forecast.node, forecast.bar);
  new Lost(column, "finished realisations are in their results file");
  const update = () => {
    const state = model.state;
    sender.answered(state.answered);
    for (const [name, field] of fields) field.update(state.fields[name]);
    updateHead(top, state.page);
    updateOpened(file, state.open);
    updatePrediction(forecast, state.forecast, state.start);
  };
  model.on("state", update);
  update();
  el.append(column);
}
