// Head of a view: its question as a button that gives it the room, and its own switch.

export function render({ model, el }) {
  const button = document.createElement("button");
  button.type = "button";
  button.title = "Gives this view the room; again, back.";
  button.addEventListener("click", () => model.send_msg({ kind: "focus" }));
  const title = document.createElement("h2");
  title.append(button);
  const state = document.createElement("span");
  state.className = "state";
  state.setAttribute("role", "status");
  const set = document.createElement("div");
  set.setAttribute("role", "radiogroup");
  set.setAttribute("aria-label", model.question);
  const inputs = model.options.map(([value, text]) => {
    const label = document.createElement("label");
    const input = Object.assign(document.createElement("input"), { type: "radio", name: "choice", value });
    input.addEventListener("change", () => model.send_msg({ kind: "choose", value }));
    const span = document.createElement("span");
    span.textContent = text;
    label.append(input, span);
    set.append(label);
    return input;
  });
  set.hidden = !inputs.length;
  const beside = document.createElement("div");
  beside.className = "beside";
  const toggles = (model.toggles || []).map(([name, text, hint]) => {
    const toggle = document.createElement("button");
    Object.assign(toggle, { type: "button", className: "toggle", textContent: text, title: hint });
    toggle.addEventListener("click", () => model.send_msg({ kind: "toggle", name, value: toggle.getAttribute("aria-pressed") !== "true" }));
    beside.append(toggle);
    return [name, toggle];
  });
  beside.hidden = !toggles.length;
  const act = document.createElement("button");
  act.type = "button";
  act.className = "act";
  act.addEventListener("click", () => model.send_msg({ kind: "act", name: model.action }));
  const update = () => {
    act.hidden = !model.action;
    act.textContent = model.action === "cancel" ? "Cancel" : "Compute";
    act.title = model.action === "cancel" ? "Stops this computation; what is shown stays." : "Computes this view for the present settings.";
    button.textContent = model.question;
    button.setAttribute("aria-expanded", model.focused ? "true" : "false");
    for (const input of inputs) input.checked = input.value === model.choice;
    for (const [name, toggle] of toggles) toggle.setAttribute("aria-pressed", (model.shown || []).includes(name) ? "true" : "false");
    state.textContent = state.title = model.stale;
    document.getElementById(`view-${model.key}`)?.classList.toggle("stale", Boolean(model.stale) && !model.fresh);
  };
  for (const name of ["question", "focused", "choice", "stale", "fresh", "action", "shown"]) model.on(name, update);
  const head = document.createElement("div");
  head.className = model.tall ? "head tall" : "head";
  head.append(title, state, act, beside, set);
  el.append(head);
  update();
}
