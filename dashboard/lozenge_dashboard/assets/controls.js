// The control column. The server puts fields.js before this text.

const PART = 262144; // bytes per message of a file

async function sendFile(file, purpose, limit, model) {
  const head = { kind: "file", purpose, name: file.name, size: file.size };
  if (file.size > limit) { model.send_msg({ ...head, data: null, last: true, first: true }); return; }
  for (let at = 0; at === 0 || at < file.size; at += PART) {
    const bytes = new Uint8Array(await file.slice(at, at + PART).arrayBuffer());
    let text = "";
    for (let i = 0; i < bytes.length; i += 8192) text += String.fromCharCode(...bytes.subarray(i, i + 8192));
    model.send_msg({ ...head, data: btoa(text), first: at === 0, last: at + PART >= file.size });
  }
}

// Sends a file for what its name says that it is.
function give(file, model, name) {
  const end = file.name.toLowerCase().split(".").pop();
  const purpose = name === "points" || end === "csv" ? "points" : end === "zip" ? "bundle" : "preset";
  sendFile(file, purpose, model[`${purpose}_limit`], model);
}

function opener(spec, model) {
  const input = make("input", { type: "file", accept: spec.accept, class: "unseen", tabindex: -1, "aria-label": spec.label,
    onchange: () => { for (const file of input.files) give(file, model, spec.name); input.value = ""; } });
  return [make("button", { type: "button", title: spec.hint, onclick: () => input.click() }, spec.label), input];
}

function heading(model, act) {
  const parts = {
    title: make("h1"), sentence: make("p", { class: "sentence" }), agreement: make("p", { class: "agreement", role: "status" }),
    error: make("p", { class: "refusal", role: "alert" }),
    keep: make("button", { type: "button", onclick: () => act("keep"), title: "Freezes the present curves as a grey reference in every view; again removes them." }, "Keep"),
    back: make("button", { type: "button", onclick: () => act("back"), title: "Returns every control to the loaded preset." }, "Back to preset"),
    theme: make("button", { type: "button", onclick: () => act("theme") }),
    campaign: make("a", { class: "button", href: model.campaign, target: "_blank", title: "Opens a page that runs this screen over many realisations, until an error is reached." }, "Campaign …"),
    evidence: make("a", { class: "button", href: model.evidence, target: "_blank", title: "Opens a page that asks what this screen's numbers are due to: cut, geometry, state or sprinkling." }, "Evidence …"),
  };
  const shipped = make("select", { "aria-label": "Shipped presets", onchange: () => { model.send_msg({ kind: "act", name: "shipped", value: shipped.value }); shipped.value = ""; } },
    make("option", { value: "" }, "Presets"), ...model.shipped.map(([value, label]) => make("option", { value }, label)));
  const files = opener({ name: "preset", label: "Open", accept: ".json,.zip,application/json,application/zip", hint: "Loads a preset file or a bundle; it may also be dropped on this column." }, model);
  const saver = make("button", { type: "button", onclick: () => act("save"), title: "Downloads this screen as a preset file, with its numbers." }, "Save");
  parts.node = make("header", {}, parts.title, parts.sentence, parts.agreement,
    make("div", { class: "buttons" }, shipped, ...files, saver, parts.back, parts.keep, parts.theme, parts.campaign, parts.evidence), parts.error);
  return parts;
}

function work(act) {
  const parts = {
    text: make("p", {}), bar: make("progress", { max: 1, "aria-label": "progress" }),
    compute: make("button", { type: "button", class: "primary", onclick: () => act("compute") }, "Compute"),
    cancel: make("button", { type: "button", onclick: () => act("cancel") }, "Cancel"),
  };
  parts.node = make("div", { class: "work", role: "status" }, parts.text, parts.bar, make("div", { class: "buttons" }, parts.compute, parts.cancel));
  return parts;
}

function updateHeading(parts, page) {
  parts.title.textContent = page.title;
  parts.sentence.textContent = page.sentence;
  parts.agreement.textContent = page.agreement;
  parts.agreement.classList.toggle("differs", page.differs);
  parts.agreement.hidden = !page.agreement;
  parts.error.textContent = page.error;
  parts.error.hidden = !page.error;
  parts.keep.setAttribute("aria-pressed", page.keeping ? "true" : "false");
  parts.keep.textContent = page.keeping ? "Remove kept" : "Keep";
  parts.back.disabled = !page.changed;
  dress(parts.theme, page);
}

function updateWork(parts, job) {
  parts.node.hidden = !job.text;
  parts.text.textContent = job.text;
  parts.bar.hidden = job.fraction === null;
  if (job.fraction !== null) parts.bar.value = job.fraction;
  parts.compute.hidden = !job.can_compute;
  parts.cancel.hidden = !job.can_cancel;
}

function background(act) {
  const parts = { text: make("span", { role: "status" }), button: make("button", { type: "button" }) };
  parts.button.addEventListener("click", () => act(parts.action));
  parts.node = make("div", { class: "line behind" }, parts.text, parts.button);
  return parts;
}

function updateBackground(parts, state) {
  parts.node.hidden = !state.text;
  parts.text.textContent = state.text;
  parts.action = state.action;
  parts.button.hidden = !state.action;
  parts.button.textContent = state.action === "halt" ? "Pause" : "Resume";
}

function buildGroup(spec, fields, sender, model) {
  const cost = make("span", { class: "cost" });
  const body = spec.fields.map((field) => {
    const made = new FIELDS[field.kind](field, sender);
    const node = made.build();
    fields.set(field.name, made);
    return node;
  });
  const files = (spec.files || []).map((file) => make("div", { class: "buttons" }, ...opener(file, model)));
  const title = make("h2", {}, spec.title);
  if (spec.folded) {
    return [cost, make("details", { class: "group" }, make("summary", {}, title, cost), ...body, ...files)];
  }
  return [cost, make("section", { class: "group", "aria-label": spec.title }, make("div", { class: "head" }, title, cost), ...body, ...files)];
}

export function render({ model, el }) {
  const sender = new Sender(model);
  const send = (message) => sender.send(message);
  const act = (name) => send({ kind: "act", name });
  const fields = new Map();
  const costs = new Map();
  const head = heading(model, act);
  const job = work(act);
  const behind = background(act);
  const trail = new Trail(sender, model);
  const column = make("div", { class: "column", "aria-label": "Controls", role: "form" }, head.node, trail.node, job.node);
  new Lost(column, "the address brings this screen back");
  for (const spec of model.groups) {
    const [cost, node] = buildGroup(spec, fields, sender, model);
    costs.set(spec.title, cost);
    column.append(node);
    if (spec.title === "Averaging") node.append(behind.node);
  }
  column.addEventListener("dragover", (event) => event.preventDefault());
  column.addEventListener("drop", (event) => {
    event.preventDefault();
    for (const file of event.dataTransfer.files) give(file, model);
  });
  const update = () => {
    sender.answered(model.state.answered);
    trail.update(model.state.trail, model.state.answered);
    for (const [name, field] of fields) field.update(model.state.fields[name]);
    for (const [title, cost] of costs) cost.textContent = model.state.costs[title] || "";
    updateHeading(head, model.state.page);
    updateWork(job, model.state.job);
    updateBackground(behind, model.state.behind);
  };
  model.on("state", update);
  model.on("msg:custom", (message) => { if (message.kind === "download") save(message.name, message.text); });
  model.on("remove", () => trail.remove());
  update();
  el.append(column);
}
