/* Figures of twicetold pages. Works from disk: nothing is fetched. */
"use strict";
(function () {
  const home = (window.twicetold = window.twicetold || {});
  const shared = home.shared || { datasets: {}, config: {}, colours: {} };

  /* One specification: the page adds what all figures share, and takes the title as caption. */
  function complete(text) {
    const spec = JSON.parse(text);
    const datasets = Object.assign({}, spec.datasets);
    (spec.usermeta && spec.usermeta.shared ? spec.usermeta.shared : []).forEach(function (name) {
      datasets[name] = shared.datasets[name];
    });
    return { spec: spec, datasets: datasets };
  }

  /* Colours become style-sheet variables, so that a figure follows the page into the dark. */
  function painted(text) {
    return text.replace(/#[0-9a-f]{6}/g, function (hex) {
      const name = shared.colours[hex];
      return name ? "var(--f-" + name + ")" : hex;
    });
  }

  function fitted(spec, width) {
    const meta = spec.usermeta || {};
    const wide = Math.max(200, Math.min(width, meta.widest || 1100));
    spec.width = wide;
    if (meta.aspect) {
      spec.height = Math.max(meta.lowest || 0, Math.round((wide - 12) * meta.aspect));
    } else if (meta.height) {
      spec.height = meta.height;
    }
    spec.autosize = { type: "fit-x", contains: "padding", resize: false };
    const columns = Math.max(1, Math.floor((wide - 40) / (wide < 500 ? 185 : 165)));
    spec.config = Object.assign({}, spec.config);
    spec.config.legend = Object.assign({}, spec.config.legend, { columns: columns });
    if (wide < 480) {
      const y = { labelLimit: 110 };
      spec.config.axisY = Object.assign({}, spec.config.axisY, y);
    }
    return spec;
  }

  function compiled(entry, width, forScreen) {
    const source = Object.assign({}, entry.spec, { config: shared.config });
    const datasets = entry.datasets;
    delete source.datasets;
    delete source.title;
    let vl = fitted(JSON.parse(JSON.stringify(source)), width);
    if (forScreen) {
      vl = JSON.parse(painted(JSON.stringify(vl)));
      vl.background = null;
      vl.padding = 2;
    }
    vl.datasets = datasets;
    return vl;
  }

  /* Nothing of the drawing library's own furniture; only errors are worth a word. */
  function options(renderer) {
    return { mode: "vega-lite", renderer: renderer, actions: false, defaultStyle: false, logLevel: 1 };
  }

  /* Tooltip: plain text only, each value in its own direction. */
  let tip = null;
  function tooltip(handler, event, item, value) {
    if (!tip) {
      tip = document.createElement("div");
      tip.className = "tip";
      tip.setAttribute("aria-hidden", "true");
      document.body.appendChild(tip);
    }
    if (value === null || value === undefined || value === "") {
      tip.hidden = true;
      return;
    }
    tip.textContent = "";
    Object.keys(value).forEach(function (key, k) {
      const held = value[key];
      if (held === undefined || held === null || held === "" || held === "undefined") return;
      const line = document.createElement(k ? "span" : "b");
      line.dir = "auto";
      if (k) {
        const name = document.createElement("i");
        name.textContent = key + ": ";
        line.appendChild(name);
      }
      line.appendChild(document.createTextNode(String(held)));
      tip.appendChild(line);
    });
    tip.hidden = false;
    const box = tip.getBoundingClientRect();
    let x = event.clientX + 14;
    let y = event.clientY + 14;
    if (x + box.width > window.innerWidth - 6) x = Math.max(6, event.clientX - box.width - 14);
    if (y + box.height > window.innerHeight - 6) y = Math.max(6, event.clientY - box.height - 14);
    tip.style.left = x + "px";
    tip.style.top = y + "px";
  }

  const drawn = new Map();
  function draw(plot) {
    const entry = drawn.get(plot);
    const width = Math.floor(plot.clientWidth);
    if (!width || entry.width === width) return entry.done;
    entry.width = width;
    const held = plot.offsetHeight;
    if (entry.result) {
      entry.result.finalize();
      /* The page keeps its length while a figure is drawn anew. */
      plot.style.minHeight = held + "px";
    }
    const box = document.createElement("div");
    const settings = Object.assign(options("svg"), { tooltip: tooltip });
    entry.done = vegaEmbed(box, compiled(entry, width, true), settings).then(function (result) {
      if (entry.width !== width) {
        result.finalize();
        return;
      }
      /* The plot is one image with one name; nothing inside it is announced. */
      box.querySelectorAll("[role], [aria-roledescription], [aria-label]").forEach(function (mark) {
        mark.removeAttribute("role");
        mark.removeAttribute("aria-roledescription");
        mark.removeAttribute("aria-label");
      });
      plot.replaceChildren(box);
      plot.style.minHeight = "";
      entry.result = result;
      if (home.clicked && plot.dataset.figure === "figure-clusters") {
        result.view.addEventListener("click", function (event, item) {
          if (item && item.datum) home.clicked(item.datum);
        });
      }
      plot.setAttribute("data-drawn", "yes");
    });
    return entry.done;
  }

  function save(plot, format) {
    const entry = drawn.get(plot);
    const width = Math.max(640, Math.min(plot.clientWidth, 900));
    const source = Object.assign({}, entry.spec, { config: shared.config });
    const vl = fitted(JSON.parse(JSON.stringify(source)), width);
    vl.datasets = entry.datasets;
    vegaEmbed(document.createElement("div"), vl, options("svg")).then(function (result) {
      return result.view.toImageURL(format, format === "png" ? 300 / 96 : 1).then(function (url) {
        result.finalize();
        const link = document.createElement("a");
        link.href = url;
        link.download = plot.dataset.figure.replace("figure-", "") + "." + format;
        link.click();
      });
    });
  }

  function start() {
    const plots = Array.from(document.querySelectorAll(".plot[data-figure]"));
    plots.forEach(function (plot) {
      const node = document.getElementById(plot.dataset.figure);
      drawn.set(plot, complete(node.textContent));
      const saves = plot.parentNode.querySelector(".saves");
      if (saves) {
        saves.hidden = false;
        saves.querySelectorAll("button").forEach(function (button) {
          button.addEventListener("click", function () {
            save(plot, button.dataset.format);
          });
        });
      }
    });
    const nearby = new IntersectionObserver(
      function (entries) {
        entries.forEach(function (entry) {
          if (!entry.isIntersecting) return;
          nearby.unobserve(entry.target);
          draw(entry.target);
          widths.observe(entry.target);
        });
      },
      { rootMargin: "600px 0px" }
    );
    let waiting = 0;
    const widths = new ResizeObserver(function (entries) {
      window.clearTimeout(waiting);
      waiting = window.setTimeout(function () {
        entries.forEach(function (entry) {
          draw(entry.target);
        });
      }, 120);
    });
    plots.forEach(function (plot) {
      nearby.observe(plot);
    });
    /* On paper every figure must be there, seen or not. */
    window.addEventListener("beforeprint", function () {
      plots.forEach(draw);
    });
    home.drawAll = function () {
      return Promise.all(plots.map(draw));
    };
  }
  start();
})();
