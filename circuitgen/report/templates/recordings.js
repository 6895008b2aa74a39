// Rows of recordings, sorted by any column; rows without a value come last.
(function recordings() {
  const table = byId("recordings-table");
  const body = table.tBodies[0];

  function compare(key, sign) {
    return (a, b) => {
      const [left, right] = [a.dataset[key], b.dataset[key]];
      if (left === "" || right === "") return (left === "") - (right === "");
      const both = key === "pathway" ? left.localeCompare(right) : Number(left) - Number(right);
      return sign * both || Number(a.dataset.row) - Number(b.dataset.row);
    };
  }

  for (const button of table.querySelectorAll("button[data-sort]")) {
    button.addEventListener("click", () => {
      const head = button.closest("th");
      const up = head.getAttribute("aria-sort") !== "ascending";
      for (const th of table.tHead.rows[0].cells) {
        if (th.hasAttribute("aria-sort")) th.setAttribute("aria-sort", "none");
      }
      head.setAttribute("aria-sort", up ? "ascending" : "descending");
      body.append(...[...body.rows].sort(compare(button.dataset.sort, up ? 1 : -1)));
    });
  }
  CSV.recordings = () => rowsOf(DATA.recordings);
  CSV.pathways = () => rowsOf(DATA.pathways);
})();
