// What stands on top of the column once the server is gone.
class Lost {
  constructor(column, after) {
    this.column = column;
    this.after = after; // what a reload brings back
    this.text = make("p", {});
    this.node = make("div", { class: "lost", role: "alert", hidden: true }, this.text,
      button("Reload", "Loads the page again, once the server answers.", () => this.reload(), "primary"));
    column.prepend(this.node);
    this.watch();
  }

  // The document is there only after the column is made.
  watch() {
    const found = window.Bokeh?.documents?.[0];
    if (!found) { setTimeout(() => this.watch(), 100); return; }
    found.on_event("connection_lost", () => this.say());
  }

  say() {
    this.tell("The connection to the server is lost: what is shown stays, and nothing can be changed.");
    const idle = [...[...this.column.children].filter((part) => part !== this.node && !part.matches("header, .trail")),
      ...this.column.querySelectorAll("header > .buttons, .trail > .walk"),
      ...[...document.querySelectorAll("section.view")].map((view) => view.firstElementChild)];
    for (const part of idle) part.inert = true;
    this.node.hidden = false;
  }

  tell(what) {
    this.text.textContent = `${what} If Lozenge has ended, start it again with --port ${location.port}. Then reload: ${this.after}.`;
  }

  async reload() {
    try {
      await fetch(location.pathname, { method: "HEAD", cache: "no-store" });
    } catch {
      this.tell("The server does not answer yet.");
      return;
    }
    location.reload();
  }
}
