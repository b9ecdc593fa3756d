// A click on a column head sorts the table; without script the table is complete all the same.
document.querySelectorAll("table.sortable").forEach((table) => {
  const body = table.tBodies[0];
  if (body.rows.length < 3) return;
  Array.from(table.tHead.rows[0].cells).forEach((head, column) => {
    const button = document.createElement("button");
    button.type = "button";
    button.append(...head.childNodes);
    head.append(button);
    button.addEventListener("click", () => {
      const down = head.getAttribute("aria-sort") === "ascending";
      const key = (row) => (row.cells[column].querySelector(".value") || row.cells[column]).textContent.trim();
      const number = (text) => parseFloat(text.replace("−", "-").replace(/,/g, ""));
      const rows = Array.from(body.rows).sort((a, b) => {
        const [s, t] = [key(a), key(b)];
        const [x, y] = [number(s), number(t)];
        if (head.classList.contains("n") || a.cells[column].querySelector(".value")) {
          if (isNaN(x) || isNaN(y)) return isNaN(x) - isNaN(y);
          return down ? y - x : x - y;
        }
        return down ? t.localeCompare(s) : s.localeCompare(t);
      });
      for (const other of table.tHead.rows[0].cells) other.removeAttribute("aria-sort");
      head.setAttribute("aria-sort", down ? "descending" : "ascending");
      body.append(...rows);
    });
  });
});
