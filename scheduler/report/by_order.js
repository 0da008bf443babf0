
// ---- a page that shows one order at a time, its charts whole

const HTML = ["tiles", "cards", "rows"]; // escaped where the page was made
const CHARTS = ["charts", "small"];

function show(data, place) {
  const order = data.orders[place];
  find("title").textContent = order.title;
  find("picker").value = String(place);
  for (const part of HTML) if (part in order) find(part).innerHTML = order[part];
  for (const part of CHARTS) if (part in order) drawAll(find(part), order[part]);
}

run(async () => {
  const report = await readPage();
  find("picker").addEventListener("change", (event) => show(report, Number(event.target.value)));
  fitPaper(690, 250);
  show(report, 0);
});
