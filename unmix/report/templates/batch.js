"use strict";
/* The table of all rows: filtered, sorted and shown fifty at a time, from the data in the page. */
const PER_PAGE = 50;

class Rows {
  constructor(data, root) {
    this.columns = data.columns;
    this.rows = data.rows;
    this.root = root;
    this.sort = null;
    this.page = 0;
    this.search = root.querySelector("[data-search]");
    this.choices = [...root.querySelectorAll("[data-choice]")];
    this.body = root.querySelector("tbody");
    this.count = root.querySelector("[data-count]");
    [this.search, ...this.choices].forEach((control) => control.addEventListener("input", () => this.show(0)));
    root.querySelector("[data-before]").addEventListener("click", () => this.show(this.page - 1));
    root.querySelector("[data-after]").addEventListener("click", () => this.show(this.page + 1));
    root.querySelector("[data-clear]").addEventListener("click", () => this.only({}));
    root.querySelectorAll("th").forEach((head, column) => {
      head.querySelector("button").addEventListener("click", () => this.by(head, column));
    });
    this.show(0);
  }

  by(head, column) {
    const was = head.getAttribute("aria-sort");
    const text = this.columns[column].kind === "text";
    const down = was === null ? !text : was === "ascending";
    this.root.querySelectorAll("th").forEach((other) => other.removeAttribute("aria-sort"));
    head.setAttribute("aria-sort", down ? "descending" : "ascending");
    this.sort = { column, down };
    this.show(0);
  }

  /* Show only what is chosen: {scene: ..., variant: ...}. */
  only(chosen) {
    this.search.value = "";
    this.choices.forEach((select) => { select.value = chosen[select.dataset.choice] || ""; });
    this.show(0);
  }

  found() {
    const words = this.search.value.toLowerCase().split(/\s+/).filter(Boolean);
    const chosen = this.choices.map((select) => [this.columns.findIndex((c) => c.key === select.dataset.choice), select.value])
      .filter(([, value]) => value !== "");
    let rows = this.rows.filter((row) => chosen.every(([column, value]) => row[column] === value)
      && words.every((word) => row.some((cell) => typeof cell === "string" && cell.toLowerCase().includes(word))));
    if (this.sort) {
      const { column, down } = this.sort;
      rows = [...rows].sort((x, y) => {
        const [a, b] = [x[column], y[column]];
        if (a === null || b === null) return (a === null) - (b === null);
        const order = typeof a === "string" ? a.localeCompare(b) : a - b;
        return down ? -order : order;
      });
    }
    return rows;
  }

  show(page) {
    const rows = this.found();
    const pages = Math.max(1, Math.ceil(rows.length / PER_PAGE));
    this.page = Math.min(Math.max(page, 0), pages - 1);
    const first = this.page * PER_PAGE;
    const shown = rows.slice(first, first + PER_PAGE);
    this.body.replaceChildren(...shown.map((row) => this.line(row)));
    this.count.textContent = rows.length === 0 ? "no row"
      : `${first + 1} to ${first + shown.length} of ${rows.length} rows`;
    this.root.querySelector("[data-before]").disabled = this.page === 0;
    this.root.querySelector("[data-after]").disabled = this.page === pages - 1;
  }

  line(row) {
    const line = document.createElement("tr");
    row.forEach((value, k) => {
      const column = this.columns[k];
      const cell = document.createElement("td");
      if (column.kind === "text") {
        cell.className = "text";
        const name = document.createElement("bdi");
        name.textContent = value === null ? "" : value;
        cell.append(name);
      } else {
        cell.textContent = value === null ? "\u2013"
          : figureText(value, column);
      }
      line.append(cell);
    });
    return line;
  }
}

/* A figure with a true minus sign, and none before a nought. */
function figureText(value, column) {
  const rounded = Number(value.toFixed(column.digits)) + 0;
  return `${column.signed && rounded >= 0 ? "+" : ""}${rounded.toFixed(column.digits)}`.replace("-", "\u2212");
}

/* Scenes to look at and listen to: one is open at a time. */
class Details {
  constructor(described) {
    this.players = new Map();
    this.described = described;
    this.links = [...document.querySelectorAll("[data-open]")];
    this.links.forEach((button) => button.addEventListener("click", () => this.open(button.dataset.open)));
    if (described.length) this.open(described[0].key);
  }

  open(key) {
    const known = this.described.find((one) => one.key === key);
    if (!known) return false;
    this.players.forEach((player) => player.stop());
    this.key = key;
    document.querySelectorAll("[data-detail]").forEach((part) => { part.hidden = part.dataset.detail !== key; });
    this.links.forEach((button) => button.setAttribute("aria-pressed", String(button.dataset.open === key)));
    if (known.signals && !this.players.has(key)) {
      const player = new Player(known.signals, known.seconds, known.sample_rate);
      const root = document.querySelector(`[data-detail="${key}"]`);
      bindTransport(player, root, { startS: known.start_s, active: () => this.key === key });
      this.players.set(key, player);
    }
    window.player = this.players.get(key);
    return true;
  }
}

function startBatch(data, described, byScene) {
  const table = new Rows(data, document.querySelector("[data-rows]"));
  const details = new Details(described);
  const go = (scene) => {
    table.only({ scene });
    const key = byScene[scene];
    const place = key !== undefined && details.open(key)
      ? document.querySelector(`[data-detail="${key}"]`) : document.querySelector("[data-rows]");
    place.scrollIntoView();
    place.focus({ preventScroll: true });
  };
  document.querySelectorAll("svg a").forEach((dot) => {
    const link = dot.getAttribute("xlink:href") || dot.getAttribute("href") || "";
    const scene = data.scenes[Number(link.replace("#scene-", ""))];
    dot.setAttribute("tabindex", "-1");  // thousands of dots; the table holds the same for the keyboard
    dot.setAttribute("aria-hidden", "true");
    dot.addEventListener("click", (event) => { event.preventDefault(); go(scene); });
    const title = document.createElementNS("http://www.w3.org/2000/svg", "title");
    title.textContent = scene;
    dot.append(title);
  });
  window.batch = { table, details, go };
}
