"use strict";
// Links the page's controls and table with the views; the views' models are found by their names.
(function () {
  const { names, labels } = JSON.parse(document.getElementById("names").textContent);
  const byId = (id) => document.getElementById(id);

  function wait(then) {
    const ready = window.Bokeh && Bokeh.documents.length && Bokeh.documents[0].get_model_by_name("points");
    if (ready) then(Bokeh.documents[0]); else setTimeout(() => wait(then), 50);
  }

  wait((views) => {
    const model = (name) => views.get_model_by_name(name);
    const points = model("points");

    // three views side by side where the window has room for them, else as wide as they are
    const all = ["map-left", "map-right", "scatter"].map(model);
    const wide = all[0].width, beside = 150, above = 120;
    const slope = (all[0].height - above) / (wide - beside);
    function fit() {
      const third = Math.floor((document.querySelector(".views").clientWidth - 2 * 16) / 3);
      const width = third < 360 ? wide : Math.min(wide, third);
      for (const view of all) view.width = width;
      for (const view of all.slice(0, 2)) view.height = Math.round((width - beside) * slope) + above;
    }
    window.addEventListener("resize", fit);
    fit();

    // a copy of what was there stays plain text, so that dollars in a name are no formula
    const plain = (old, text) => old.clone({ text });

    function showLayer(side, chosen) {
      names.forEach((name, place) => {
        model(`image-${side}-${place}`).visible = place === chosen && byId("show-values").checked;
        model(`bar-${side}-${place}`).visible = place === chosen;
      });
      const title = model(`map-${side}`).title;
      title.text = plain(title.text, labels[chosen]);
    }
    function showLayers() {
      for (const side of ["left", "right"]) {
        showLayer(side, Number(byId(`layer-${side}`).value));
        const flags = model(`flags-${side}`);
        if (flags) flags.visible = byId("show-flags").checked;
      }
    }
    for (const id of ["layer-left", "layer-right", "show-values", "show-flags"]) {
      const control = byId(id);
      if (control) control.addEventListener("change", showLayers);
    }

    function showScatter() {
      const renderer = model("points-scatter");
      const scatter = model("scatter");
      for (const [axis, other] of [["x", "below"], ["y", "left"]]) {
        const place = Number(byId(`scatter-${axis}`).value);
        for (const glyph of [renderer.glyph, renderer.selection_glyph, renderer.nonselection_glyph]) {
          if (glyph && glyph[axis]) glyph[axis] = { field: `v${place}` };
        }
        const shown = scatter[other][0];
        shown.axis_label = plain(shown.axis_label, labels[place]);
      }
      scatter.reset.emit();
    }
    for (const id of ["scatter-x", "scatter-y"]) byId(id).addEventListener("change", showScatter);

    function tell() {
      const chosen = points.selected.indices;
      if (!chosen.length) {
        byId("selection").textContent = "No pixel is selected.";
        return;
      }
      const parts = names.map((name, place) => {
        const values = chosen.map((i) => points.data[`v${place}`][i]).filter(Number.isFinite);
        const mean = values.reduce((sum, value) => sum + value, 0) / values.length;
        const spread = Math.sqrt(values.reduce((sum, value) => sum + (value - mean) ** 2, 0) / Math.max(values.length - 1, 1));
        return `${name} ${mean.toPrecision(4)} (spread ${spread.toPrecision(2)})`;
      });
      byId("selection").textContent = `${chosen.length} pixels are selected. Means: ${parts.join("; ")}.`;
    }
    points.selected.change.connect(tell);
    byId("clear").addEventListener("click", () => { points.selected.indices = []; });

    for (const button of document.querySelectorAll("button[data-region]")) {
      button.addEventListener("click", () => {
        const region = Number(button.dataset.region);
        const found = [];
        points.data.region.forEach((value, i) => { if (value === region) found.push(i); });
        points.selected.indices = found;
        for (const row of document.querySelectorAll("tr.shown")) row.classList.remove("shown");
        button.closest("tr").classList.add("shown");
      });
    }
    tell();
    (function settled() {
      if (views.is_idle) document.documentElement.dataset.ready = "yes"; else setTimeout(settled, 50);
    })();
  });

  for (const button of document.querySelectorAll("th button")) {
    button.addEventListener("click", () => {
      const header = button.closest("th");
      const table = header.closest("table");
      const column = [...header.parentNode.children].indexOf(header);
      const rising = header.getAttribute("aria-sort") !== "ascending";
      for (const other of header.parentNode.children) other.removeAttribute("aria-sort");
      header.setAttribute("aria-sort", rising ? "ascending" : "descending");
      const key = (row) => row.children[column].dataset.value ?? row.children[column].textContent;
      const rows = [...table.tBodies[0].rows].sort((a, b) => {
        const [p, q] = [key(a), key(b)];
        const order = p !== "" && q !== "" && !isNaN(p) && !isNaN(q) ? Number(p) - Number(q) : p.localeCompare(q);
        return rising ? order : -order;
      });
      table.tBodies[0].append(...rows);
    });
  }
})();
