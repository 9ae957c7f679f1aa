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
  const update = () => {
    button.textContent = model.question;
    button.setAttribute("aria-expanded", model.focused ? "true" : "false");
    for (const input of inputs) input.checked = input.value === model.choice;
    state.textContent = model.stale;
    document.getElementById(`view-${model.key}`)?.classList.toggle("stale", Boolean(model.stale));
  };
  for (const name of ["question", "focused", "choice", "stale"]) model.on(name, update);
  const head = document.createElement("div");
  head.className = "head";
  head.append(title, state, set);
  el.append(head);
  update();
}
