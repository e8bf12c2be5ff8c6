// Sorting and filtering of the page's tables. Without it the page is complete: every row stands there.
(function () {
  "use strict";

  function text(cell) {
    return cell ? cell.textContent.trim().replace(/\s+/g, " ") : "";
  }

  function value(row, column) {
    var words = text(row.cells[column]);
    var found = words.replace(/−/g, "-").match(/^[+-]?\d+(\.\d+)?(e[+-]?\d+)?/i);
    return { words: words, number: found ? Number(found[0]) : null };
  }

  // Numbers before words, and what is not there at the end, whichever way the column runs.
  function compare(first, second, sign) {
    var empty = (first.words === "–" || !first.words) - (second.words === "–" || !second.words);
    if (empty) { return empty; }
    if (first.number !== null && second.number !== null && first.number !== second.number) {
      return sign * (first.number - second.number);
    }
    return sign * first.words.localeCompare(second.words, "en", { numeric: true });
  }

  // A table whose rows stand in groups is sorted by group: the first row of each tells where it goes.
  function sort(table, column, sign) {
    var groups = table.tBodies.length > 1;
    var parts = groups ? Array.from(table.tBodies) : Array.from(table.tBodies[0].rows);
    var parent = groups ? table : table.tBodies[0];
    var keyed = parts.map(function (part) {
      return { part: part, key: value(groups ? part.rows[0] : part, column) };
    });
    keyed.sort(function (first, second) { return compare(first.key, second.key, sign); });
    keyed.forEach(function (one) { parent.appendChild(one.part); });
  }

  function makeSortable(table) {
    Array.from(table.tHead.rows[0].cells).forEach(function (cell, column) {
      var button = document.createElement("button");
      button.type = "button";
      button.className = "sort";
      while (cell.firstChild) { button.appendChild(cell.firstChild); }
      cell.appendChild(button);
      button.addEventListener("click", function () {
        var down = cell.getAttribute("aria-sort") === "ascending";
        Array.from(table.tHead.rows[0].cells).forEach(function (other) { other.removeAttribute("aria-sort"); });
        cell.setAttribute("aria-sort", down ? "descending" : "ascending");
        sort(table, column, down ? -1 : 1);
      });
    });
  }

  function makeFilter(form) {
    var table = document.getElementById(form.getAttribute("data-for"));
    var said = form.querySelector("[role=status]");
    var parts = Array.from(table.tBodies.length > 1 ? table.tBodies : table.tBodies[0].rows);
    var words = parts.map(function (part) { return text(part).toLowerCase(); });

    function apply() {
      var wanted = Array.from(form.querySelectorAll("input, select")).filter(function (field) { return field.value; });
      var shown = 0;
      parts.forEach(function (part, index) {
        var fits = wanted.every(function (field) {
          if (field.type === "search") {
            return field.value.toLowerCase().split(/\s+/).every(function (word) {
              return words[index].indexOf(word) >= 0;
            });
          }
          return part.getAttribute("data-" + field.name) === field.value;
        });
        part.hidden = !fits;
        shown += fits ? 1 : 0;
      });
      said.textContent = wanted.length ? shown + " of " + parts.length + " shown" : parts.length + " in all";
      form.classList.toggle("narrowed", wanted.length > 0);
    }

    form.addEventListener("input", apply);
    form.addEventListener("change", apply);
    form.addEventListener("submit", function (event) { event.preventDefault(); });
    form.addEventListener("reset", function () { window.setTimeout(apply, 0); });
    form.hidden = false;
    apply();
  }

  document.querySelectorAll("table[data-sort]").forEach(makeSortable);
  document.querySelectorAll("form[data-for]").forEach(makeFilter);
}());
