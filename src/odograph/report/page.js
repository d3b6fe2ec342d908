"use strict";
(function () {
  var value = function (row, column) {
    var cell = row.cells[column];
    var raw = cell.dataset.v !== undefined ? cell.dataset.v : cell.textContent.trim();
    var number = Number(raw);
    return raw === "" || raw === "–" || raw === "nan" ? null : isNaN(number) ? raw.toLowerCase() : number;
  };
  var compare = function (a, b, sign) {
    if (a === null || b === null) return a === b ? 0 : a === null ? 1 : -1;
    if (typeof a !== typeof b) return typeof a === "number" ? -1 : 1;
    if (typeof a === "string") return sign * a.localeCompare(b, "en", { numeric: true });
    return sign * (a - b);
  };
  document.querySelectorAll("table.sortable").forEach(function (table) {
    var body = table.tBodies[0];
    Array.from(table.tHead.rows[0].cells).forEach(function (head, column) {
      if (body.rows.length < 2 || body.querySelector("td:nth-child(" + (column + 1) + ") svg")) return;
      var button = document.createElement("button");
      button.type = "button";
      button.textContent = head.textContent;
      head.replaceChildren(button);
      button.addEventListener("click", function () {
        var down = head.getAttribute("aria-sort") === "ascending";
        Array.from(table.tHead.rows[0].cells).forEach(function (other) { other.removeAttribute("aria-sort"); });
        head.setAttribute("aria-sort", down ? "descending" : "ascending");
        var rows = Array.from(body.rows).map(function (row, place) { return [value(row, column), place, row]; });
        rows.sort(function (a, b) { return compare(a[0], b[0], down ? -1 : 1) || a[1] - b[1]; });
        rows.forEach(function (entry) { body.appendChild(entry[2]); });
      });
    });
  });
  var units = document.getElementById("unit-table");
  if (!units) return;
  var rows = Array.from(units.tBodies[0].rows);
  var form = document.createElement("form");
  form.className = "filters";
  var fields = {};
  var add = function (title, control) {
    var label = document.createElement("label");
    label.append(title, control);
    form.append(label);
    control.addEventListener("input", apply);
    return control;
  };
  var choose = function (title, name, split) {
    var found = new Set();
    rows.forEach(function (row) {
      (split ? row.dataset[name].split(" ") : [row.dataset[name]]).forEach(function (item) { if (item) found.add(item); });
    });
    var options = split ? Array.from(found) : Array.from(found).sort();
    var select = document.createElement("select");
    select.add(new Option("all", ""));
    options.forEach(function (item) { select.add(new Option(item.replaceAll("_", " "), item)); });
    if (split) select.add(new Option("none", " "));
    fields[name] = add(title, select);
  };
  var count = document.createElement("output");
  var words = document.createElement("input");
  words.type = "search";
  add("find", words);
  choose("session", "session", false);
  choose("animal", "animal", false);
  choose("encodes", "encodes", true);
  choose("status", "status", false);
  form.append(count);
  form.addEventListener("submit", function (event) { event.preventDefault(); });
  units.closest(".scroll").before(form);
  function apply() {
    var wanted = words.value.trim().toLowerCase();
    var shown = 0;
    rows.forEach(function (row) {
      var encodes = fields.encodes.value;
      var fits = ["session", "animal", "status"].every(function (name) {
        return !fields[name].value || fields[name].value === row.dataset[name];
      });
      fits = fits && (!encodes || (encodes === " " ? row.dataset.status === "fitted" && !row.dataset.encodes
        : row.dataset.encodes.split(" ").includes(encodes)));
      fits = fits && (!wanted || row.textContent.toLowerCase().includes(wanted));
      row.hidden = !fits;
      shown += fits ? 1 : 0;
    });
    count.textContent = shown + " of " + rows.length + " units";
  }
  apply();
})();
