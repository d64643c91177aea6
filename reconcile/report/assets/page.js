// Only comfort: sorting tables and choosing a snapshot. Without it everything can be read, too.
(function () {
  "use strict";
  var number = function (text) {
    var t = text.trim();
    return /^[-+]?[0-9.]/.test(t) ? parseFloat(t) : NaN;
  };
  document.querySelectorAll("table.sortable").forEach(function (table) {
    var body = table.tBodies[0];
    var first = Array.from(body.rows);
    table.querySelectorAll("thead th").forEach(function (head, column) {
      var button = document.createElement("button");
      button.type = "button";
      button.textContent = head.textContent || "column " + (column + 1);
      head.textContent = "";
      head.appendChild(button);
      button.addEventListener("click", function () {
        var now = head.getAttribute("aria-sort");
        var next = now === "ascending" ? "descending" : now === "descending" ? null : "ascending";
        table.querySelectorAll("thead th").forEach(function (h) { h.removeAttribute("aria-sort"); });
        var rows = first.slice();
        if (next) {
          head.setAttribute("aria-sort", next);
          var sign = next === "ascending" ? 1 : -1;
          var keys = new Map(rows.map(function (row) { return [row, row.cells[column].textContent]; }));
          rows.sort(function (a, b) {
            var x = number(keys.get(a)), y = number(keys.get(b));
            if (isNaN(x) && isNaN(y)) { return sign * keys.get(a).localeCompare(keys.get(b)); }
            if (isNaN(x) || isNaN(y)) { return isNaN(x) ? 1 : -1; }
            return sign * (x - y);
          });
        }
        rows.forEach(function (row) { body.appendChild(row); });
      });
    });
  });
  var chooser = document.querySelector(".chooser");
  if (!chooser) { return; }
  var parts = Array.from(document.querySelectorAll("details.snapshot"));
  var slider = chooser.querySelector("input"), shown = chooser.querySelector("output");
  var show = function (k) {
    parts.forEach(function (part, i) { part.hidden = i !== k; part.open = i === k; });
    var label = parts[k].getAttribute("data-label");
    shown.textContent = label;
    slider.setAttribute("aria-valuetext", label);
  };
  slider.addEventListener("input", function () { show(Number(slider.value)); });
  document.addEventListener("click", function (event) {
    var link = event.target.closest ? event.target.closest("a[href^='#snapshot-']") : null;
    if (!link) { return; }
    var k = parts.findIndex(function (part) { return "#" + part.id === link.getAttribute("href"); });
    if (k >= 0) { slider.value = k; show(k); }
  });
  chooser.hidden = false;
  show(Number(slider.value));
})();
