// Puts a chart that answers the pointer in the place of the drawn one. Without this file every page is complete.
const script = document.querySelector('script[data-vega]');
const dark = window.matchMedia('(prefers-color-scheme: dark)');
let library;

function load() {
  library ??= import(script.dataset.vega).then(() => window.vegaEmbed);
  return library;
}

function tip() {
  const box = document.createElement('div');
  box.className = 'tip';
  box.hidden = true;
  document.body.append(box);
  return box;
}
const box = tip();

// Our own tooltip: text nodes only, no style that the page's policy would refuse.
function tell(handler, event, item, value) {
  if (value === null || value === undefined || value === '') {
    box.hidden = true;
    return;
  }
  const list = document.createElement('dl');
  for (const [key, text] of Object.entries(value)) {
    const term = document.createElement('dt');
    const said = document.createElement('dd');
    term.textContent = key;
    said.textContent = String(text);
    list.append(term, said);
  }
  box.replaceChildren(list);
  box.hidden = false;
  const left = event.clientX + 14;
  box.style.left = `${Math.max(4, Math.min(left, window.innerWidth - box.offsetWidth - 4))}px`;
  box.style.top = `${Math.max(4, event.clientY - box.offsetHeight - 14)}px`;
}

async function draw(plot) {
  const address = new URL(plot.dataset.spec, location.href);
  address.searchParams.set('scheme', dark.matches ? 'dark' : 'light');
  try {
    const [embed, answer] = await Promise.all([load(), fetch(address, { credentials: 'same-origin' })]);
    if (!answer.ok) return;
    const place = document.createElement('div');
    place.className = 'live';
    plot.drawn ??= [...plot.childNodes];
    plot.replaceChildren(place);
    try {
      plot.view?.finalize();
      plot.view = await embed(place, await answer.json(), {
        ast: true, actions: false, renderer: 'svg', defaultStyle: false, tooltip: tell,
      });
    } catch (error) {
      plot.replaceChildren(...plot.drawn);
      throw error;
    }
  } catch (error) {
    console.warn('the drawn chart stays:', error);
  }
}

const seen = new IntersectionObserver((entries) => {
  for (const entry of entries) {
    if (entry.isIntersecting) {
      seen.unobserve(entry.target);
      draw(entry.target);
    }
  }
}, { rootMargin: '200px' });
const plots = document.querySelectorAll('.plot[data-spec]');
plots.forEach((plot) => seen.observe(plot));
dark.addEventListener('change', () => plots.forEach((plot) => plot.view && draw(plot)));
window.addEventListener('scroll', () => { box.hidden = true; }, { passive: true });
window.addEventListener('beforeprint', () => plots.forEach((plot) => plot.drawn && plot.replaceChildren(...plot.drawn)));
window.addEventListener('afterprint', () => plots.forEach((plot) => plot.drawn && draw(plot)));
