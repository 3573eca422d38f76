// One expiry: its quotes as bars from bid to ask in volatility, its smile, and how far the smile
// misses them.

const shownStates = {
  used: true,
  spare: true,
  dropped: true
};

function keyMark(kind, text) {
  const svg = d3.create('svg').attr('viewBox', '0 0 26 16');
  if (kind === 'fit')
    svg.append('path').attr('class', 'fit').attr('d', 'M1 12C9 3 15 3 25 8');
  else if (kind === 'beyond')
    svg.append('path').attr('class', 'fit beyond').attr('d', 'M1 12C9 3 15 3 25 8');
  else if (kind === 'band')
    svg.append('rect').attr('class', 'band').attr('width', 26).attr('height', 16);
  else if (kind === 'leg')
    svg.append('g')
        .attr('class', 'q')
        .append('rect')
        .attr('class', 'leg')
        .attr('x', 8)
        .attr('y', 3)
        .attr('width', 10)
        .attr('height', 10);
  else
    drawQuote(svg.append('g').attr('class', 'q ' + kind.split(' ')[0]), kind, 13, 1, 15);
  return el('span', {}, svg.node(), text);
}

// A bar with its mark: a dot used, a ring spare, a cross dropped; a triangle where one side only is
// there.
function drawQuote(g, kind, x, top, bottom) {
  const side = kind.split(' ')[1];
  if (side === 'ask') {
    g.append('path')
        .attr('class', 'dot half')
        .attr('d', 'M' + (x - 4) + ' ' + (top - 3) + 'h8l-4 7Z');
    return;
  }
  if (side === 'bid') {
    g.append('path')
        .attr('class', 'dot half')
        .attr('d', 'M' + (x - 4) + ' ' + (bottom + 3) + 'h8l-4 -7Z');
    return;
  }
  const y = (top + bottom) / 2;
  g.append('line').attr('x1', x).attr('x2', x).attr('y1', top).attr('y2', bottom);
  if (kind === 'dropped')
    g.append('path')
        .attr('class', 'dot')
        .attr('d', 'M' + (x - 4.5) + ' ' + (y - 4.5) + 'l9 9m0 -9l-9 9');
  else
    g.append('circle')
        .attr('class', 'dot')
        .attr('cx', x)
        .attr('cy', y)
        .attr('r', kind === 'used' ? 3 : 2.6);
}

// Quotes of an expiry by state, and how many of the dropped had no bid.
function countStates(e) {
  const by = {used: 0, spare: 0, dropped: 0, noBid: 0};
  e.quotes.forEach((q) => {
    by[q.state]++;
    by.noBid += reasonWord(q.reason) === 'no-bid' ? 1 : 0;
  });
  return by;
}

// What of a quote can be drawn: both sides, one, or nothing.
function sides(q) {
  const bid = q.volBid > 0 ? q.volBid : null, ask = q.volAsk > 0 ? q.volAsk : null;
  if (bid !== null && ask !== null) return {kind: q.state, low: bid, high: ask};
  if (ask !== null) return {kind: q.state + ' ask', low: ask, high: ask};
  if (bid !== null) return {kind: q.state + ' bid', low: bid, high: bid};
  return null;
}

function acrossOf(expiry) {
  const f = expiry.forward ? expiry.forward.forward : 1;
  return chosen.strikes ? {
    unit: 'strike, quote currency',
    of: (strike) => strike,
    k: (k) => f * Math.exp(k),
    format: priceTick
  } :
                          {
                            unit: 'moneyness, strike over forward',
                            of: (strike) => strike / f,
                            k: Math.exp,
                            format: (x) => fixed(x, 2)
                          };
}

// Strikes that both pictures span: quotes with a volatility, and the fitted range.
function spanOf(expiry, across) {
  const drawn = expiry.quotes.filter((q) => shownStates[q.state] && sides(q));
  const inner = drawn.filter((q) => q.state === 'used').map((q) => across.of(q.strike));
  const outer = drawn.map((q) => across.of(q.strike));
  if (expiry.fit) inner.push(across.k(expiry.fit.low), across.k(expiry.fit.high));
  if (!inner.length) return extent(outer, 0.04);
  const [low, high] = d3.extent(inner), room = (high - low) * 0.45 || high * 0.1;
  const kept = outer.filter((x) => x > low - room && x < high + room);
  return extent(inner.concat(kept), 0.03);
}

function volSpan(expiry, span, across) {
  const inside = (x) => x >= span[0] && x <= span[1];
  const values = [];
  for (const q of expiry.quotes) {
    if (q.state === 'used' && inside(across.of(q.strike)))
      values.push(q.volBid > 0 ? q.volBid : q.volAsk, q.volAsk);
  }
  if (expiry.fit)
    expiry.fit.k.forEach((k, i) => {
      if (inside(across.k(k)) && within(expiry.fit, k)) values.push(expiry.fit.vol[i]);
    });
  if (!values.length)
    expiry.quotes.forEach((q) => {
      const s = sides(q);
      if (s) values.push(s.low, s.high);
    });
  const [low, high] = extent(values, 0.12);
  // Dropped quotes draw the picture out, up to as much again; further ones stand at its edge.
  const far =
      expiry.quotes.filter((q) => q.state === 'dropped' && sides(q) && inside(across.of(q.strike)))
          .map((q) => sides(q).high);
  const room = (high - low) * 0.7;
  return [Math.max(0, low), d3.max(far.filter((v) => v < high + room).concat(high)) * 1.01];
}

function drawSmile(svg, width, height) {
  const expiry = chosen.expiry;
  if (!expiry) return [];
  const across = acrossOf(expiry), span = spanOf(expiry, across);
  const x = d3.scaleLinear(span, [MARGIN.left, width - MARGIN.right]);
  const y = d3.scaleLinear(volSpan(expiry, span, across), [height - MARGIN.bottom, MARGIN.top]);
  axes(svg, width, height, {
    x,
    y,
    xUnit: across.unit,
    yUnit: 'volatility, % a year',
    xFormat: across.format,
    yFormat: percentTick
  });
  const stops = [], inner = clipTo(svg, 'smile-clip', width, height);
  drawBand(inner, expiry, x, y, across);
  drawForwardGuide(svg, expiry, x, y, across, height);
  const quotes = svg.append('g'), labels = [];
  for (const state of ['spare', 'dropped', 'used']) {
    if (!shownStates[state]) continue;
    for (const q of expiry.quotes)
      if (q.state === state) drawOne(quotes, q, x, y, across, stops, labels);
  }
  drawCurve(inner, expiry, x, y, across, stops);
  drawLabels(svg, labels, curveOf(expiry, x, y, across), width, height);
  return stops.sort((a, b) => (a.series > b.series) - (a.series < b.series) || a.x - b.x);
}

function drawOne(group, q, x, y, across, stops, labels) {
  const s = sides(q), at = across.of(q.strike), [left, right] = x.range();
  if (!s) return;
  const [bottom, top] = y.range(), nudge = q.state === 'spare' ? 3 : 0, px = x(at) + nudge;
  if (px < left - 2 || px > right + 4) return;
  const hold = (v) => Math.max(top, Math.min(bottom, y(v)));
  const a = hold(s.high), b = hold(s.low), g = group.append('g').attr('class', 'q ' + q.state);
  drawQuote(g, s.kind, px, a, Math.max(b, a + 0.5));
  const beyond = y(s.low) < top || y(s.high) > bottom;
  const lit = chosen.violation && q.legs.includes(chosen.violation);
  if (q.legs.length) {
    g.classed('lit', lit)
        .append('rect')
        .attr('class', 'leg')
        .attr('x', px - 6)
        .attr('width', 12)
        .attr('y', (a + b) / 2 - 6)
        .attr('height', 12);
  }
  stops.push({
    x: px,
    y: (a + b) / 2,
    series: '1' + (q.state === 'used' ? 'a' : q.state),
    name: contractName(q) + ' \u00b7 ' + q.state,
    lines: quoteLines(q)
  });
  if (q.state === 'dropped' && !UNLABELLED.includes(reasonWord(q.reason))) {
    labels.push({
      x: px,
      y: (a + b) / 2,
      lit,
      text: reasonWord(q.reason) + (beyond ? (y(s.high) < top ? ' \u2191' : ' \u2193') : '')
    });
  }
}

// Reasons that say nothing of where a quote lies, and that whole chains can have.
const UNLABELLED = ['no-bid', 'duplicate'];

// The smile as drawn, y of x in pixels; NaN where there is none.
function curveOf(expiry, x, y, across) {
  const fit = expiry.fit;
  if (!fit) return () => NaN;
  const points = fit.k.map((k, i) => [x(across.k(k)), isNumber(fit.vol[i]) ? y(fit.vol[i]) : NaN]);
  return (px) => {
    const i = points.findIndex((p) => p[0] >= px);
    if (i <= 0) return NaN;
    const [a, b] = [points[i - 1], points[i]];
    return a[1] + (b[1] - a[1]) * (px - a[0]) / (b[0] - a[0]);
  };
}

// A label stands beside its quote where it meets nothing: no other label, curve or axis title.
// Where there is no such place it is left out; pointing at the quote says the reason too.
function drawLabels(svg, labels, curve, width, height) {
  const far = (label) => Math.abs(label.y - curve(label.x)) || 0;
  labels.sort((a, b) => b.lit - a.lit || far(b) - far(a) || a.x - b.x);
  const taken = [
    {left: 0, right: 170, top: 0, bottom: 18},  // the title of the axis
    ...labels.map((l) => ({left: l.x - 4, right: l.x + 4, top: l.y - 4, bottom: l.y + 4}))
  ];
  const meets = (a, b) =>
      a.left < b.right && b.left < a.right && a.top < b.bottom && b.top < a.bottom;
  const onCurve = (box) => d3.range(box.left, box.right + 4, 4).some((px) => {
    const y = curve(px);
    return y > box.top - 2 && y < box.bottom + 2;
  });
  const inside = (box) => box.left >= MARGIN.left && box.right <= width && box.top >= 2 &&
      box.bottom <= height - MARGIN.bottom - 16;
  const free = (box) => inside(box) && !onCurve(box) && !taken.some((t) => meets(t, box));
  for (const label of labels) {
    const wide = label.text.length * 6.8;
    const boxes =
        [-4, -17, 9, -30, 22].flatMap((rise) => [8, -8 - wide].map((aside) => ({
                                                                     left: label.x + aside,
                                                                     right: label.x + aside + wide,
                                                                     top: label.y + rise - 6,
                                                                     bottom: label.y + rise + 7
                                                                   })));
    const box = boxes.find(free);
    if (!box) continue;
    taken.push(box);
    const after = box.left > label.x;
    svg.append('text')
        .attr('class', 'why')
        .attr('x', after ? box.left : box.right)
        .attr('y', box.bottom - 3)
        .attr('text-anchor', after ? 'start' : 'end')
        .text(label.text);
  }
}

function drawBand(inner, expiry, x, y, across) {
  if (!expiry.band) return;
  inner.append('path')
      .attr('class', 'band')
      .attr(
          'd',
          d3.area()
              .defined((b) => isNumber(b[1]) && isNumber(b[2]))
              .x((b) => x(across.k(b[0])))
              .y0((b) => y(b[1]))
              .y1((b) => y(b[2]))(expiry.band));
}

function drawForwardGuide(svg, expiry, x, y, across, height) {
  if (!expiry.forward) return;
  const at = x(across.of(expiry.forward.forward));
  svg.append('line')
      .attr('class', 'guide')
      .attr('x1', at)
      .attr('x2', at)
      .attr('y1', MARGIN.top)
      .attr('y2', height - MARGIN.bottom);
  svg.append('text')
      .attr('class', 'guide-text')
      .attr('x', at + 4)
      .attr('y', height - MARGIN.bottom - 5)
      .text('forward');
}

function drawCurve(inner, expiry, x, y, across, stops) {
  const fit = expiry.fit;
  if (!fit) return;
  const line = d3.line()
                   .defined((i) => isNumber(fit.vol[i]))
                   .x((i) => x(across.k(fit.k[i])))
                   .y((i) => y(fit.vol[i]))
                   .curve(d3.curveMonotoneX);
  const all = d3.range(fit.k.length), inside = all.filter((i) => within(fit, fit.k[i]));
  inner.append('path').attr('class', 'fit beyond').attr('d', line(all));
  inner.append('path').attr('class', 'fit').attr('d', line(inside));
  const [left, right] = x.range();
  for (const i of all) {
    const px = x(across.k(fit.k[i]));
    if (px < left || px > right || !isNumber(fit.vol[i])) continue;
    const band = (expiry.band || []).find((b) => Math.abs(b[0] - fit.k[i]) < 1e-6);
    stops.push({
      x: px,
      y: y(fit.vol[i]),
      series: '0',
      name:
          'smile at strike ' + price(+(expiry.forward.forward * Math.exp(fit.k[i])).toPrecision(6)),
      lines: [
        ['volatility', vol(fit.vol[i])], ['strike over forward', fixed(Math.exp(fit.k[i]), 4)],
        ['ln(K/F)', fixed(fit.k[i], 4)],
        ['rests on', within(fit, fit.k[i]) ? 'quotes around it' : 'the rule beyond the quotes']
      ].concat(band ? [['band', vol(band[1]) + ' to ' + vol(band[2])]] : [])
    });
  }
}

function smileTable() {
  const expiry = chosen.expiry;
  if (!expiry) return {head: [], rows: []};
  return {
    head: [
      '>strike', 'side', '>bid', '>ask', '>vol bid', '>vol ask', '>fitted', '>miss, half-spreads',
      'state', 'reason', 'note', 'read from'
    ],
    rows: expiry.quotes.filter((q) => shownStates[q.state]).map((q) => {
      const unit = (v) => q.inVol ? vol(v) : price(v);
      return [
        price(q.strike), q.put ? 'put' : 'call', unit(q.bid), unit(q.ask), vol(q.volBid),
        vol(q.volAsk), vol(q.volFit), isNumber(q.miss) ? signed(q.miss, 2) : '', q.state,
        q.reason ? reasonWord(q.reason) : '', q.note >= 0 ? page.notes[q.note] : '',
        foreign(place(q))
      ];
    })
  };
}

// Distance of the smile from the middle of each used quote, in half-spreads: within 1 is inside.
function residualOf(q) {
  const half = Math.max((q.volAsk - q.volBid) / 2, 1e-6);
  return (q.volFit - (q.volAsk + q.volBid) / 2) / half;
}
function drawResiduals(svg, width, height) {
  const expiry = chosen.expiry;
  if (!expiry) return [];
  const margin = MARGIN, across = acrossOf(expiry), stops = [];
  const used = expiry.quotes.filter((q) => q.state === 'used' && isNumber(q.volFit));
  const reach =
      Math.min(6, Math.max(1.5, 1.15 * (d3.max(used, (q) => Math.abs(residualOf(q))) || 1)));
  const x = d3.scaleLinear(spanOf(expiry, across), [margin.left, width - margin.right]);
  const y = d3.scaleLinear([-reach, reach], [height - margin.bottom, margin.top]);
  svg.append('rect')
      .attr('class', 'band')
      .attr('x', margin.left)
      .attr('width', width - margin.left - margin.right)
      .attr('y', y(1))
      .attr('height', y(-1) - y(1));
  axes(
      svg, width, height,
      {x, y, xUnit: across.unit, yUnit: 'half-spreads', xFormat: across.format, margin});
  svg.append('line')
      .attr('class', 'guide')
      .attr('x1', margin.left)
      .attr('x2', width - margin.right)
      .attr('y1', y(0))
      .attr('y2', y(0));
  if (!used.length)
    svg.append('text')
        .attr('class', 'guide-text')
        .attr('x', margin.left + 10)
        .attr('y', y(0) - 8)
        .text('No quote of this night is in the fit at this expiry.');
  for (const q of used) {
    const r = residualOf(q), px = x(across.of(q.strike)),
          py = y(Math.max(-reach, Math.min(reach, r))), out = q.miss !== 0;
    const g = svg.append('g').attr('class', 'q ' + (out ? 'dropped' : 'used'));
    g.append('line').attr('x1', px).attr('x2', px).attr('y1', y(0)).attr('y2', py);
    if (out)
      g.append('path')
          .attr('class', 'dot')
          .attr(
              'd',
              'M' + (px - 5) + ' ' + (r > 0 ? py + 5 : py - 5) + 'h10l-5 ' + (r > 0 ? -9 : 9) +
                  'Z');
    else
      g.append('circle').attr('class', 'dot').attr('cx', px).attr('cy', py).attr('r', 2.4);
    stops.push({
      x: px,
      y: py,
      series: '0',
      name: contractName(q),
      lines: [
        ['from the middle', signed(r, 2) + ' half-spreads'],
        ['bid to ask', vol(q.volBid) + ' to ' + vol(q.volAsk)], ['fitted', vol(q.volFit)],
        ['miss', q.miss === 0 ? 'inside' : signed(q.miss, 2) + ' half-spreads']
      ]
    });
  }
  return stops.sort((a, b) => a.x - b.x);
}
function residualTable() {
  const used = (chosen.expiry ? chosen.expiry.quotes : [])
                   .filter((q) => q.state === 'used' && isNumber(q.volFit));
  return {
    head: [
      '>strike', 'side', '>from the middle, half-spreads', '>miss, half-spreads', '>vol bid',
      '>vol ask', '>fitted'
    ],
    rows: used.map(
        (q) =>
            [price(q.strike), q.put ? 'put' : 'call', signed(residualOf(q), 2), signed(q.miss, 2),
             vol(q.volBid), vol(q.volAsk), vol(q.volFit)])
  };
}

function smilePanel() {
  let smile, residuals;
  const redraw = () => {
    smile.redraw();
    residuals.redraw();
  };
  const states = ['used', 'spare', 'dropped'].map((state) => toggle(state, true, (on) => {
                                                    shownStates[state] = on;
                                                    redraw();
                                                  }));
  const across = choice(
      'Across', 'across', [['strikes', 'strike'], ['moneyness', 'K/F']], 'strikes', (value) => {
        chosen.strikes = value === 'strikes';
        redraw();
      });
  const keys = [
    keyMark('used', 'used'), keyMark('spare', 'spare'),
    keyMark('dropped', 'dropped: pointing at it says why'), keyMark('dropped ask', 'one side only'),
    keyMark('leg', 'leg of an arbitrage'), keyMark('fit', 'smile'),
    keyMark('beyond', 'smile beyond the quotes')
  ];
  if (page.expiries.some((e) => e.band)) keys.push(keyMark('band', 'what the quotes allow'));
  smile = new Figure({
    id: 'smile-figure',
    inset: true,
    title: 'Smile',
    note: ' ',
    height: (w) => Math.max(280, Math.min(440, w * 0.52)),
    reach: 40,
    draw: drawSmile,
    table: smileTable,
    controls: [...states, across],
    key: keys
  });
  residuals = new Figure({
    id: 'residual-figure',
    inset: true,
    title: 'Residuals',
    note:
        'Smile less the middle of each used quote. Within the band the quote is met inside its spread.',
    height: () => 210,
    draw: drawResiduals,
    table: residualTable
  });
  onChoose(() => {
    const e = chosen.expiry, by = e && countStates(e);
    smile.note(
        !e ? '' :
             'Expiry ' + e.label + ', ' + days(e.t) + ' days: ' + by.used + ' used, ' + by.spare +
                ' spare, ' + by.dropped + ' dropped' +
                (by.noBid ? ', ' + by.noBid + ' of them without a bid.' : '.') +
                (e.carried ? ' Carried from ' + e.carried.from.slice(0, 10) + ', ' +
                         fixed(e.carried.days, 0) + ' days old.' :
                             ''));
    redraw();
  });
  return [smile.node, residuals.node];
}
