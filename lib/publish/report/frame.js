// What every picture stands in: a title, axes with units, a twin as a table, and numbers that are
// read by pointer, touch or arrow keys. Stands before the pictures themselves.

const page = readData();
const quoteFields = [
  'strike', 'put', 'reason', 'bid', 'ask', 'volBid', 'volAsk', 'volFit', 'miss', 'file', 'line',
  'note', 'inVol', 'american'
];
const byFields = (fields) => (row) => Object.fromEntries(fields.map((name, i) => [name, row[i]]));
page.expiries.forEach((expiry, at) => {
  expiry.place = at;
  expiry.quotes = expiry.quotes.map(byFields(quoteFields));
  for (const q of expiry.quotes) {
    q.expiry = expiry;
    q.state = stateOf(q.reason);
    q.legs = [];
  }
  if (expiry.forward) {
    expiry.forward = byFields([
      'forward', 'discount', 'rate', 'carry', 'pairs', 'breaks', 'source', 'low', 'high'
    ])(expiry.forward);
  }
  if (expiry.financing) {
    expiry.financing = byFields([
      'spot', 'spotOrigin', 'rate', 'rateOrigin', 'dividends', 'effect', 'borrow', 'borrowOrigin',
      'exercise'
    ])(expiry.financing);
  }
  if (expiry.carried) expiry.carried = {from: expiry.carried[0], days: expiry.carried[1]};
});
page.unplaced = page.unplaced.map(byFields(quoteFields));
page.unplaced.forEach((q) => {
  q.state = stateOf(q.reason);
  q.legs = [];
  q.expiry = null;
});
page.quotes = page.expiries.flatMap((e) => e.quotes).concat(page.unplaced);
page.violations = page.violations.map(byFields([
  'scope', 'kind', 'expiry', 'expiry2', 'at', 'strikes', 'amount', 'points', 'halfSpreads', 'text',
  'legs'
]));
page.violations.forEach((v, at) => {
  v.place = at;
  v.legs = v.legs.map(byFields(['quantity', 'type', 'strike', 'expiry', 'price']));
  for (const leg of v.legs) {
    const expiry = page.expiries[leg.expiry];
    if (!expiry || leg.type === 'F' || v.scope !== 'quotes') continue;
    expiry.quotes.filter((q) => q.strike === leg.strike && q.put === (leg.type === 'P' ? 1 : 0))
        .forEach((q) => q.legs.push(v));
  }
});
page.changes = page.changes.map(byFields([
  'expiry', 'date', 'tenor', 'k', 'strike', 'before', 'after', 'level', 'skew', 'curvature',
  'forward', 'roll', 'rest', 'flagged', 'move', 'near', 'typical', 'why'
]));
page.changes.forEach((c) => {
  c.change = c.after - c.before;
});
page.fitted = page.expiries.filter((e) => e.fit);
// Why a whole expiry is not this night's.
page.carriedExpiries =
    page.expiries.filter((e) => e.carried || (e.forward && e.forward.source === 'carried'));

// The expiry that is looked at, and the violation whose legs are shown; pictures watch both.
const chosen = {
  expiry: null,
  violation: null,
  strikes: true
};
const choosers = [];
function onChoose(watch) {
  choosers.push(watch);
}
function choose(expiry, violation) {
  chosen.expiry = expiry;
  chosen.violation = violation || null;
  choosers.forEach((watch) => watch());
}
function goTo(id) {
  document.getElementById(id).scrollIntoView({block: 'start'});
}

function contractName(q) {
  return (q.put ? 'put ' : 'call ') + (isNumber(q.strike) ? price(q.strike) : '?');
}
function fileName(q) {
  return (page.files[q.file] || '').replace(/^.*[\\/]/, '');
}
function place(q) {
  return fileName(q) + ' line ' + q.line;
}
function quoteLines(q) {
  const unit = (x) => q.inVol ? vol(x) : price(x);
  const lines = [
    ['bid', unit(q.bid) + (q.volBid > 0 && !q.inVol ? ' \u00b7 ' + vol(q.volBid) : '')],
    ['ask', unit(q.ask) + (q.volAsk > 0 && !q.inVol ? ' \u00b7 ' + vol(q.volAsk) : '')]
  ];
  if (isNumber(q.volFit)) lines.push(['fitted', vol(q.volFit)]);
  if (isNumber(q.miss))
    lines.push(['miss', q.miss === 0 ? 'inside' : signed(q.miss, 2) + ' half-spreads']);
  if (q.reason) lines.push([q.state, reasonWord(q.reason)]);
  if (q.note >= 0) lines.push(['note', page.notes[q.note]]);
  for (const v of q.legs.slice(0, 2))
    lines.push(['leg of', v.kind + ' arbitrage ' + (v.place + 1)]);
  lines.push(['read from', place(q)]);
  return lines;
}

// options: {id, title, note, height(width), draw(svg, width, height) -> stops, table() -> {head,
// rows}, controls: [nodes], key: [nodes], inset}. A stop is a place that can be read: {x, y, name,
// lines: [[what, value]...], series, act}; those of one series follow one another.
// Not on paper, where all is light.
function isDark() {
  return document.documentElement.dataset.shade === 'dark' && !printing;
}
const figures = [];
let printing = false;
const figureOf = (node) => figures.find((f) => f.plot === node || f.node === node);
const sizes = new ResizeObserver((entries) => entries.forEach(({target, contentRect}) => {
  const figure = figureOf(target), width = Math.floor(contentRect.width);
  if (width > 0 && width !== figure.width) figure.redraw(width);
}));
const nearness = new IntersectionObserver(
    (entries) => entries.forEach(({target, isIntersecting}) => {
      const figure = figureOf(target);
      figure.near = isIntersecting;
      if (isIntersecting && !figure.drawn) figure.draw(figure.plot.clientWidth);
    }),
    {rootMargin: '60% 0%'});
addEventListener('beforeprint', () => {
  printing = true;
  figures.forEach((f) => f.redraw());
});
addEventListener('afterprint', () => {
  printing = false;
  figures.forEach((f) => f.redraw());
});

class Figure {
  constructor(options) {
    this.options = options;
    this.stops = [];
    this.at = -1;
    const title = el('h3', {}, options.title);
    this.noteNode = el('p', {class: 'note'}, options.note || '');
    this.twin =
        el('button',
           {type: 'button', class: 'twin', 'aria-pressed': 'false', onclick: () => this.turn()},
           'table');
    this.svg = d3.create('svg').attr('aria-hidden', 'true');
    this.readout = el('div', {class: 'readout', hidden: true});
    this.plot =
        el('div', {
          class: 'plot',
          tabindex: '0',
          role: 'img',
          'aria-label': options.title + '. Arrow keys read the points, Enter chooses.',
          onkeydown: (event) => this.keys(event),
          onblur: () => this.leave()
        },
           this.svg.node(), this.readout);
    this.svg.node().addEventListener('pointermove', (event) => this.point(event));
    this.svg.node().addEventListener('pointerdown', (event) => this.point(event));
    this.svg.node().addEventListener('pointerleave', () => this.leave());
    this.svg.node().addEventListener('click', () => this.act());
    this.tableNode = el('div', {class: 'as-table', hidden: true});
    this.svg.attr('height', 260);
    this.node = el(
        'figure', {class: 'figure' + (options.inset ? ' inset' : ''), id: options.id},
        el('figcaption', {}, title, el('div', {class: 'tools'}, options.controls || [], this.twin),
           options.note ? this.noteNode : null),
        this.plot, options.key ? el('div', {class: 'key'}, options.key) : null, this.tableNode);
    this.width = 0;  // drawn at; 0 for not yet
    this.near = false;
    figures.push(this);
    sizes.observe(this.plot);
    nearness.observe(this.node);
  }
  note(text) {
    this.noteNode.textContent = text;
  }
  // Draws when it is near the window, else leaves that until it comes near.
  redraw(width) {
    if (!this.tableNode.hidden) this.fillTable();
    this.drawn = false;
    if (this.near || printing) this.draw(width || this.plot.clientWidth);
  }
  draw(width) {
    if (width > 0) {
      this.width = width;
      this.drawn = true;
      const height = this.options.height(width);
      this.leave();
      this.svg.selectAll('*').remove();
      this.svg.attr('viewBox', '0 0 ' + width + ' ' + height).attr('height', height);
      this.stops = this.options.draw(this.svg, width, height) || [];
      this.ring =
          this.svg.append('circle').attr('class', 'cursor').attr('r', 7).attr('display', 'none');
    }
  }
  fillTable() {
    const {head, rows} = this.options.table();
    this.tableNode.replaceChildren(
        rows.length ? plainTable(head, rows) : el('p', {class: 'empty'}, 'Nothing to list.'));
  }
  turn() {
    const table = this.tableNode.hidden;
    this.tableNode.hidden = !table;
    this.plot.hidden = table;
    this.twin.textContent = table ? 'picture' : 'table';
    this.twin.setAttribute('aria-pressed', table);
    table ? this.fillTable() : this.redraw();
  }
  show(i) {
    this.at = i;
    const stop = this.stops[i];
    this.ring.attr('display', null).attr('cx', stop.x).attr('cy', stop.y);
    this.readout.replaceChildren(
        el('b', {}, stop.name),
        ...stop.lines.map(
            ([what, value]) => el('span', {}, el('i', {}, what), el('span', {}, value))));
    this.readout.hidden = false;
    const box = this.readout.getBoundingClientRect(), width = this.plot.clientWidth;
    const left = stop.x + 14 + box.width > width ? stop.x - 14 - box.width : stop.x + 14;
    this.readout.style.left = Math.max(0, Math.min(width - box.width, left)) + 'px';
    this.readout.style.top = Math.max(-40, stop.y - box.height - 10) + 'px';
  }
  leave() {
    this.at = -1;
    this.readout.hidden = true;
    if (this.ring) this.ring.attr('display', 'none');
  }
  point(event) {
    const box = this.svg.node().getBoundingClientRect(), reach = this.options.reach || 60;
    const x = event.clientX - box.left, y = event.clientY - box.top;
    let best = -1, least = reach * reach;
    this.stops.forEach((stop, i) => {
      const far = (stop.x - x) ** 2 + (stop.y - y) ** 2;
      if (far < least) {
        least = far;
        best = i;
      }
    });
    if (best < 0)
      this.leave();
    else if (best !== this.at)
      this.show(best);
  }
  act() {
    const stop = this.stops[this.at];
    if (stop && stop.act) stop.act();
  }
  keys(event) {
    if (event.key === 'Escape') return this.leave();
    if (event.key === 'Enter' || event.key === ' ') {
      event.preventDefault();
      return this.act();
    }
    if (!['ArrowLeft', 'ArrowRight', 'ArrowUp', 'ArrowDown', 'Home', 'End'].includes(event.key) ||
        !this.stops.length)
      return;
    event.preventDefault();
    this.show(this.next(event.key));
    const stop = this.stops[this.at];
    say(stop.name + '. ' + stop.lines.map(([what, value]) => what + ' ' + value).join(', '));
  }
  // Left and right along a series; up and down to the nearest stop of the series before and after.
  next(key) {
    const last = this.stops.length - 1;
    if (this.at < 0 || key === 'Home') return key === 'End' ? last : 0;
    if (key === 'End') return last;
    const step = key === 'ArrowRight' || key === 'ArrowDown' ? 1 : -1;
    if (key === 'ArrowLeft' || key === 'ArrowRight')
      return Math.max(0, Math.min(last, this.at + step));
    const here = this.stops[this.at];
    let i = this.at;
    while (i >= 0 && i <= last && this.stops[i].series === here.series) i += step;
    if (i < 0 || i > last) return this.at;
    const series = this.stops[i].series;
    let best = i;
    for (; i >= 0 && i <= last && this.stops[i].series === series; i += step) {
      if (Math.abs(this.stops[i].x - here.x) < Math.abs(this.stops[best].x - here.x)) best = i;
    }
    return best;
  }
}

const MARGIN = {
  top: 26,
  right: 14,
  bottom: 40,
  left: 54
};

// Axes with their units; labels as many as fit.
function axes(svg, width, height, {x, y, xUnit, yUnit, xFormat, yFormat, xTicks, margin}) {
  const m = margin || MARGIN;
  const bottom = d3.axisBottom(x).ticks(xTicks || Math.max(3, width / 90)).tickSizeOuter(0);
  const left = d3.axisLeft(y).ticks(Math.max(3, height / 46)).tickSizeOuter(0);
  if (xFormat) bottom.tickFormat(xFormat);
  if (yFormat) left.tickFormat(yFormat);
  const lines = svg.append('g');
  const yTicks = y.ticks ? y.ticks(Math.max(3, height / 46)) : [];
  lines.selectAll('line')
      .data(yTicks)
      .join('line')
      .attr('class', 'grid-line')
      .attr('x1', m.left)
      .attr('x2', width - m.right)
      .attr('y1', y)
      .attr('y2', y);
  svg.append('g')
      .attr('class', 'axis')
      .attr('transform', 'translate(0,' + (height - m.bottom) + ')')
      .call(bottom);
  svg.append('g').attr('class', 'axis').attr('transform', 'translate(' + m.left + ',0)').call(left);
  const units = svg.append('g').attr('class', 'axis');
  units.append('text')
      .attr('class', 'unit')
      .attr('x', width - m.right)
      .attr('y', height - 4)
      .attr('text-anchor', 'end')
      .text(xUnit);
  units.append('text').attr('class', 'unit').attr('x', 2).attr('y', 12).text(yUnit);
}
const tick = (decimals) => (x) => fixed(x, decimals);
const percentTick = (x) => +(100 * x).toFixed(3) + ' %';
const priceTick = (x) => price(x);
function clipTo(svg, name, width, height, margin) {
  const m = margin || MARGIN;
  svg.append('clipPath')
      .attr('id', name)
      .append('rect')
      .attr('x', m.left)
      .attr('y', m.top)
      .attr('width', Math.max(0, width - m.left - m.right))
      .attr('height', Math.max(0, height - m.top - m.bottom));
  return svg.append('g').attr('clip-path', 'url(#' + name + ')');
}
function extent(values, share) {
  const [low, high] = d3.extent(values.filter(isNumber));
  const room = ((high - low) || Math.abs(high) * 0.1 || 1) * share;
  return low === undefined ? [0, 1] : [low - room, high + room];
}
// Dashed lines of a smile beyond its quotes.
function within(fit, k) {
  return k >= fit.low - 1e-9 && k <= fit.high + 1e-9;
}
