// The browser's list of states: each settled change is an entry with its own address. Undo and redo
// walk along the same list as the browser's back and forward.

const TOP = "lozenge-top"; // number of the newest entry, kept for this tab
const WALK = 1000; // ms after which an entry that did not come is given up

class Trail {
  constructor(sender, model) {
    this.sender = sender;
    this.model = model;
    this.asked = 0; // message that asked for another entry; states before its answer are older
    this.target = null; // entry that the browser is on its way to
    this.base = this.number();
    this.top = Math.max(this.base, history.state?.lozenge === undefined ? 0 : Number(sessionStorage.getItem(TOP)) || 0);
    this.undo = button("Undo", "", () => this.walk(-1), "walk");
    this.redo = button("Redo", "", () => this.walk(1), "walk");
    this.copy = button("Copy link", "", () => this.copied());
    this.said = make("span", { class: "said", role: "status" });
    this.node = make("div", { class: "buttons trail" }, this.undo, this.redo, this.copy, this.said);
    this.onPop = () => this.followed();
    this.onKey = (event) => this.pressed(event);
    window.addEventListener("popstate", this.onPop);
    document.addEventListener("keydown", this.onKey);
  }

  remove() {
    window.removeEventListener("popstate", this.onPop);
    document.removeEventListener("keydown", this.onKey);
  }

  number() { return history.state?.lozenge ?? 0; }

  // Where the browser is, or will be: it walks a moment later, and must not be sent off the list.
  there() { return this.target ?? this.number(); }

  walk(by) {
    const next = this.there() + by;
    if (next < this.lowest() || next > this.top) return;
    this.target = next;
    clearTimeout(this.patience);
    this.patience = setTimeout(() => { this.target = null; this.dress(); }, WALK);
    history.go(by);
    this.dress();
  }

  lowest() { return Math.max(0, this.top - (history.length - 1)); }

  write(way, number, query) {
    this.target = null;
    history[way]({ lozenge: number }, "", query ? `${location.pathname}?${query}` : location.href);
  }

  update(state, answered) {
    if (answered >= this.asked) {
      const number = this.base + state.step;
      if (number > this.number()) {
        for (let next = this.number() + 1; next <= number; next++) this.write("pushState", next, state.query);
        this.top = number;
      } else if (history.state === null || (state.query && location.search.slice(1) !== state.query)) {
        this.write("replaceState", this.number(), state.query);
      }
      sessionStorage.setItem(TOP, String(this.top));
    }
    this.copy.disabled = Boolean(state.refusal);
    this.copy.title = state.refusal || "Copies the address of this screen: who opens it sees the same state. Imported points are named in it, not sent.";
    this.dress();
  }

  // A browser remembers no more than some fifty entries.
  dress() {
    this.undo.disabled = this.there() <= this.lowest();
    this.redo.disabled = this.there() >= this.top;
    this.undo.title = this.undo.disabled ? "No earlier state of this screen in this tab." : "Takes the last change back (Ctrl+Z).";
    this.redo.title = this.redo.disabled ? "No change was taken back." : "Makes the change again that was taken back (Ctrl+Shift+Z).";
  }

  followed() {
    if (history.state?.lozenge === undefined) return;
    if (this.number() === this.target) this.target = null;
    this.sender.send({ kind: "go", step: this.number() - this.base, query: location.search.slice(1) });
    this.asked = this.sender.last;
    this.dress();
  }

  pressed(event) {
    if (!(event.ctrlKey || event.metaKey) || event.altKey || event.key.toLowerCase() !== "z") return;
    const at = event.composedPath()[0];
    if (at.isContentEditable || at.matches?.("textarea, input:not([type=range], [type=radio], [type=checkbox], [type=file])")) return;
    event.preventDefault();
    const way = event.shiftKey ? this.redo : this.undo;
    if (!way.disabled && !way.inert) way.click();
  }

  async copied() {
    const link = location.href;
    let done = true;
    try {
      await navigator.clipboard.writeText(link);
    } catch {
      const box = make("textarea", { class: "unseen", "aria-hidden": "true" });
      box.value = link;
      this.node.append(box);
      box.select();
      done = document.execCommand("copy");
      box.remove();
    }
    this.said.textContent = done ? "Copied." : "Not copied: the browser forbids it. Copy the address from its bar.";
    if (done) setTimeout(() => { this.said.textContent = ""; }, 3000);
  }
}
