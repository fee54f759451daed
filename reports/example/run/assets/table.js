/* The table of all motifs: only the rows in sight are in the document, so 20,000 stay quick. */
"use strict";
(function () {
  const home = (window.twicetold = window.twicetold || {});
  const data = home.motifs;
  const root = document.getElementById("finder");
  if (!data || !root) return;
  const HEIGHT = 32;
  const SPARE = 12;
  const n = data.ids.length;
  const box = document.getElementById("motif-scroll");
  const table = document.getElementById("motif-table");
  const said = document.getElementById("motif-count");
  const inputs = {
    words: document.getElementById("find-words"),
    verdict: document.getElementById("find-verdict"),
    category: document.getElementById("find-category"),
    least: document.getElementById("find-least"),
    most: document.getElementById("find-most"),
    all: document.getElementById("find-all"),
    clear: document.getElementById("find-clear"),
  };
  const index = {};
  data.columns.forEach(function (column, k) {
    index[column.name] = k;
  });
  const collator = new Intl.Collator(undefined, { numeric: true, sensitivity: "base" });

  function raw(k, i) {
    const column = data.data[k];
    return column.levels ? column.levels[column.codes[i]] : column.v[i];
  }

  const cache = new Map();
  const superscripts = "⁰¹²³⁴⁵⁶⁷⁸⁹";
  function written(kind, value) {
    if (value === null || value === undefined || value === "") return "";
    if (kind === "t") return value;
    if (kind === "s") return value > 0 && value < 0.005 ? "<1 %" : Math.round(value * 100) + " %";
    if (kind === "w") return String(value).replace(/\B(?=(\d{3})+$)/g, "\u202f");
    if (kind === "p") {
      if (value >= 0.1) return String(Number(value.toFixed(3)));
      if (value >= 0.0001) return String(Number(value.toPrecision(2)));
      if (value <= 0) return "0";
      const power = Math.floor(Math.log10(value));
      const up = String(-power).split("").map(function (d) { return superscripts[+d]; }).join("");
      return (value / Math.pow(10, power)).toFixed(1) + " × 10⁻" + up;
    }
    return String(Number(value.toPrecision(3))).replace("-", "−");
  }

  /* The page of a motif; most are named by their id. */
  home.page = function (i) {
    return "motifs/" + encodeURIComponent(data.files[i] || data.ids[i] + ".html");
  };

  let searchable = null;
  function haystack() {
    if (!searchable) {
      const category = index.category;
      searchable = data.ids.map(function (id, i) {
        const more = category === undefined ? "" : " " + raw(category, i);
        return (id + " " + data.names[i] + more).toLocaleLowerCase();
      });
    }
    return searchable;
  }

  const state = { sort: index.rank === undefined ? -1 : index.rank, up: true, place: null, active: 0 };
  let order = [];
  let shown = [];

  function sorted() {
    const all = Array.from({ length: n }, function (_, i) { return i; });
    const k = state.sort;
    const sign = state.up ? 1 : -1;
    if (k === -1) {
      all.sort(function (a, b) {
        return sign * collator.compare(data.names[a] || data.ids[a], data.names[b] || data.ids[b]) || a - b;
      });
    } else {
      const column = data.data[k];
      const values = column.levels ? column.codes : column.v;
      /* What is not there comes last, whichever way one sorts. */
      all.sort(function (a, b) {
        const x = values[a];
        const y = values[b];
        if (x === y) return a - b;
        if (x === null) return 1;
        if (y === null) return -1;
        return sign * (x - y);
      });
    }
    order = all;
  }

  function filtered() {
    const words = inputs.words.value.trim().toLocaleLowerCase().split(/\s+/).filter(Boolean);
    const hay = words.length ? haystack() : null;
    const tests = [];
    ["verdict", "category"].forEach(function (name) {
      if (inputs[name] && inputs[name].value && index[name] !== undefined) {
        const column = data.data[index[name]];
        const code = column.levels.indexOf(inputs[name].value);
        tests.push(function (i) { return column.codes[i] === code; });
      }
    });
    const holders = index.holders === undefined ? null : data.data[index.holders].v;
    const least = inputs.least.value === "" ? -Infinity : Number(inputs.least.value);
    const most = inputs.most.value === "" ? Infinity : Number(inputs.most.value);
    if (holders && (least > -Infinity || most < Infinity)) {
      tests.push(function (i) { return holders[i] >= least && holders[i] <= most; });
    }
    if (state.place) {
      const clusters = data.data[index.clusters].v;
      tests.push(function (i) {
        return holders[i] === state.place.h && clusters[i] === state.place.c;
      });
    }
    shown = order.filter(function (i) {
      if (hay && !words.every(function (w) { return hay[i].indexOf(w) >= 0; })) return false;
      return tests.every(function (t) { return t(i); });
    });
    state.active = 0;
    const place = state.place
      ? " with " + state.place.h + " holders in " + state.place.c + " clusters (from the picture; Clear shows all)"
      : "";
    said.textContent = shown.length === n && !place
      ? written("w", n) + (n === 1 ? " motif" : " motifs")
      : written("w", shown.length) + " of " + written("w", n) + " motifs" + place;
    table.setAttribute("aria-rowcount", String(shown.length + 1));
  }

  function columns() {
    return data.columns
      .map(function (column, k) { return k; })
      .filter(function (k) { return inputs.all.checked || data.columns[k].shown; });
  }

  function heads() {
    const row = document.createElement("tr");
    row.setAttribute("aria-rowindex", "1");
    [-1].concat(columns()).forEach(function (k) {
      const th = document.createElement("th");
      th.scope = "col";
      if (k === -1) th.className = "first";
      else if (data.columns[k].kind !== "t") th.className = "n";
      if (state.sort === k) th.setAttribute("aria-sort", state.up ? "ascending" : "descending");
      else th.setAttribute("aria-sort", "none");
      const button = document.createElement("button");
      button.type = "button";
      button.textContent = k === -1 ? "motif" : data.columns[k].head;
      if (k >= 0 && data.columns[k].meaning) button.title = data.columns[k].meaning;
      button.addEventListener("click", function () {
        if (state.sort === k) state.up = !state.up;
        else {
          state.sort = k;
          state.up = true;
        }
        refresh(true, k);
      });
      th.appendChild(button);
      row.appendChild(th);
    });
    table.tHead.replaceChildren(row);
  }

  let from = -1;
  let to = -1;
  function rows(force) {
    const top = Math.max(0, box.scrollTop);
    const first = Math.max(0, Math.floor(top / HEIGHT) - SPARE);
    const last = Math.min(shown.length, Math.ceil((top + box.clientHeight) / HEIGHT) + SPARE);
    if (!force && first === from && last === to) return;
    from = first;
    to = last;
    const body = document.createDocumentFragment();
    const visible = columns();
    body.appendChild(gap(first, visible.length + 1));
    for (let place = first; place < last; place++) body.appendChild(line(place, visible));
    body.appendChild(gap(shown.length - last, visible.length + 1));
    table.tBodies[0].replaceChildren(body);
  }

  function gap(count, span) {
    const tr = document.createElement("tr");
    tr.className = "gap";
    tr.setAttribute("aria-hidden", "true");
    const td = document.createElement("td");
    td.colSpan = span;
    td.style.height = count * HEIGHT + "px";
    tr.appendChild(td);
    tr.style.height = count * HEIGHT + "px";
    return tr;
  }

  function line(place, visible) {
    const i = shown[place];
    const tr = document.createElement("tr");
    tr.setAttribute("aria-rowindex", String(place + 2));
    const name = document.createElement("td");
    name.className = "first";
    const link = document.createElement("a");
    link.href = home.page(i);
    link.textContent = data.names[i] || data.ids[i];
    link.dir = "auto";
    link.title = data.ids[i];
    link.dataset.place = String(place);
    link.tabIndex = place === state.active ? 0 : -1;
    name.appendChild(link);
    tr.appendChild(name);
    visible.forEach(function (k) {
      const column = data.columns[k];
      const td = document.createElement("td");
      const text = written(column.kind, raw(k, i));
      if (column.name === "verdict" && text) {
        const wrap = document.createElement("span");
        wrap.className = "v";
        const symbol = home.symbols && home.symbols[text];
        if (symbol) {
          wrap.appendChild(symbol.cloneNode(true));
        }
        wrap.appendChild(document.createTextNode(text));
        td.appendChild(wrap);
      } else {
        td.textContent = text;
        if (column.kind === "t") td.dir = "auto";
      }
      if (column.kind !== "t") td.className = "n";
      tr.appendChild(td);
    });
    return tr;
  }

  function refresh(resort, focusHead) {
    if (resort) sorted();
    filtered();
    heads();
    box.scrollTop = 0;
    rows(true);
    if (focusHead !== undefined) {
      const place = [-1].concat(columns()).indexOf(focusHead);
      const button = table.tHead.rows[0].cells[place].querySelector("button");
      button.focus({ preventScroll: true });
    }
  }

  /* Arrow keys, Page Up and Down, Home and End walk the rows; Enter follows the link. */
  function walk(event) {
    const link = event.target.closest && event.target.closest("a[data-place]");
    if (!link && event.target !== box) return;
    const page = Math.max(1, Math.floor(box.clientHeight / HEIGHT) - 2);
    const steps = { ArrowDown: 1, ArrowUp: -1, PageDown: page, PageUp: -page, Home: -Infinity, End: Infinity };
    if (!(event.key in steps) || !shown.length) return;
    event.preventDefault();
    const now = link ? Number(link.dataset.place) : -1;
    const next = Math.max(0, Math.min(shown.length - 1, now + steps[event.key]));
    state.active = next;
    const head = table.tHead.offsetHeight;
    const y = next * HEIGHT;
    if (y < box.scrollTop) box.scrollTop = y;
    else if (y + HEIGHT > box.scrollTop + box.clientHeight - head) {
      box.scrollTop = y + HEIGHT - box.clientHeight + head;
    }
    rows(true);
    const target = table.querySelector('a[data-place="' + next + '"]');
    if (target) target.focus({ preventScroll: true });
  }

  home.clicked = function (datum) {
    if (datum.id !== undefined) {
      const i = data.ids.indexOf(datum.id);
      if (i >= 0) window.location.href = home.page(i);
      return;
    }
    if (datum.h !== undefined && datum.c !== undefined && datum.n !== undefined) {
      state.place = { h: datum.h, c: datum.c };
      refresh(false);
      root.scrollIntoView({ block: "start" });
      box.focus({ preventScroll: true });
    }
  };

  function prepare() {
    home.symbols = {};
    document.querySelectorAll("svg[data-verdict]").forEach(function (svg) {
      if (!home.symbols[svg.dataset.verdict]) home.symbols[svg.dataset.verdict] = svg;
    });
    ["verdict", "category"].forEach(function (name) {
      const select = inputs[name];
      if (!select) return;
      if (index[name] === undefined) {
        select.closest("label").remove();
        return;
      }
      data.data[index[name]].levels.forEach(function (level) {
        if (!level) return;
        const option = document.createElement("option");
        option.value = level;
        option.textContent = level;
        select.appendChild(option);
      });
    });
    if (data.columns.every(function (c) { return c.shown; })) {
      inputs.all.closest("label").remove();
    }
    let waiting = 0;
    inputs.words.addEventListener("input", function () {
      window.clearTimeout(waiting);
      waiting = window.setTimeout(function () { refresh(false); }, 90);
    });
    [inputs.verdict, inputs.category, inputs.least, inputs.most, inputs.all].forEach(function (input) {
      if (input) input.addEventListener("input", function () { refresh(false); });
    });
    inputs.clear.addEventListener("click", function () {
      [inputs.words, inputs.verdict, inputs.category, inputs.least, inputs.most].forEach(function (input) {
        if (input) input.value = "";
      });
      state.place = null;
      refresh(false);
      inputs.words.focus();
    });
    root.addEventListener("submit", function (event) { event.preventDefault(); });
    box.addEventListener("scroll", function () { window.requestAnimationFrame(function () { rows(false); }); });
    box.addEventListener("keydown", walk);
    window.addEventListener("resize", function () { rows(true); });
    document.getElementById("all-motifs-live").hidden = false;
    refresh(true);
  }
  prepare();
})();
