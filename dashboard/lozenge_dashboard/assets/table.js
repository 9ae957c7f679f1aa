// The numbers as a table that copies as text.

export function render({ model, el }) {
  const table = document.createElement("table");
  const copy = Object.assign(document.createElement("button"), { type: "button", textContent: "Copy as text" });
  const said = document.createElement("span");
  said.setAttribute("role", "status");
  const cells = (row, kind) => {
    const line = document.createElement("tr");
    for (const text of row) line.append(Object.assign(document.createElement(kind), { textContent: text }));
    return line;
  };
  const update = () => {
    const head = document.createElement("thead");
    head.append(cells(model.columns, "th"));
    const body = document.createElement("tbody");
    body.append(...model.rows.map((row) => cells(row, "td")));
    table.replaceChildren(head, body);
  };
  copy.addEventListener("click", async () => {
    const text = [model.columns, ...model.rows].map((row) => row.join("\t")).join("\n");
    try {
      await navigator.clipboard.writeText(text);
      said.textContent = "copied";
    } catch {
      getSelection().selectAllChildren(table);
      said.textContent = "selected: copy with the keyboard";
    }
  });
  model.on("rows", update);
  update();
  el.append(table, copy, said);
}
