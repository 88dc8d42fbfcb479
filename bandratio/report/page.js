"use strict";
// Links the page's controls and table with the views; the views' models are found by their names.
(function () {
  const names = JSON.parse(document.getElementById("names").textContent);
  const byId = (id) => document.getElementById(id);

  function wait(then) {
    const ready = window.Bokeh && Bokeh.documents.length && Bokeh.documents[0].get_model_by_name("points");
    if (ready) then(Bokeh.documents[0]); else setTimeout(() => wait(then), 50);
  }

  wait((views) => {
    const model = (name) => views.get_model_by_name(name);
    const points = model("points");

    function showLayer(side, chosen) {
      names.forEach((name, place) => {
        model(`image-${side}-${place}`).visible = place === chosen && byId("show-values").checked;
        model(`bar-${side}-${place}`).visible = place === chosen;
      });
      model(`map-${side}`).title.text = names[chosen];
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
        scatter[other][0].axis_label = names[place];
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
