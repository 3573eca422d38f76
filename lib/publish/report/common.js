// What the index and the pages of underlyings share: elements, numbers, the switch between light
// and dark, tables that draw only the rows in sight. Texts go into the page as text, never as
// markup. REASONS stands before this file: [word, state, meaning] by number.

const STATUSES = [
  {word: 'published', says: 'marked, nothing to look at'},
  {word: 'flagged', says: 'marked, with something to look at'},
  {word: 'carried', says: 'an earlier night\'s surface stands in'},
  {word: 'refused', says: 'no surface tonight'},
];
// Shapes by status, about the middle of a square of 16: told apart without colour.
const SHAPES = [
  'M8 2.5a5.5 5.5 0 1 0 .001 0Z',
  'M8 1.5 15 14H1Z',
  'M8 1.8a6.2 6.2 0 1 0 .001 0ZM8 4.6a3.4 3.4 0 1 1-.001 0Z',
  'M3 1 8 6l5-5 2 2-5 5 5 5-2 2-5-5-5 5-2-2 5-5-5-5Z',
];

function el(tag, attributes, ...children) {
  const svg = tag === 'svg' || tag === 'path';
  const node = svg ? document.createElementNS('http://www.w3.org/2000/svg', tag) :
                     document.createElement(tag);
  for (const [name, value] of Object.entries(attributes || {})) {
    if (name.startsWith('on'))
      node.addEventListener(name.slice(2), value);
    else if (value !== null && value !== undefined && value !== false) {
      node.setAttribute(name, value === true ? '' : value);
    }
  }
  for (const child of children.flat(Infinity)) {
    if (child !== null && child !== undefined) node.append(child);
  }
  return node;
}

// Text of another's making, which must not turn the direction of what stands around it.
function foreign(text) {
  return el('bdi', {}, text);
}

function statusMark(status) {
  return el(
      'svg', {class: 'mark s' + status, viewBox: '0 0 16 16', 'aria-hidden': 'true'},
      el('path', {d: SHAPES[status]}));
}
function statusBadge(status) {
  return el('span', {class: 'badge'}, statusMark(status), STATUSES[status].word);
}

const isNumber = (x) => typeof x === 'number' && isFinite(x);
const grouping = new Intl.NumberFormat('en-GB', {maximumFractionDigits: 0});
function count(n) {
  return grouping.format(n);
}
function counted(n, word, many) {
  return count(n) + ' ' + (n === 1 ? word : many || word + 's');
}
const formats = new Map();
// As many decimals as asked, or "" for what is no number.
function fixed(x, decimals) {
  if (!isNumber(x)) return '';
  if (!formats.has(decimals)) {
    formats.set(
        decimals,
        new Intl.NumberFormat(
            'en-GB', {minimumFractionDigits: decimals, maximumFractionDigits: decimals}));
  }
  return formats.get(decimals).format(x).replace('-', '\u2212');
}
// Quote currency: no decimals that are not there.
const plainNumber = new Intl.NumberFormat('en-GB', {maximumSignificantDigits: 8});
function price(x) {
  return isNumber(x) ? plainNumber.format(x).replace('-', '\u2212') : '';
}
function vol(x, decimals) {
  return isNumber(x) ? fixed(100 * x, decimals === undefined ? 2 : decimals) + ' %' : '';
}
function signed(x, decimals) {
  return isNumber(x) ? (x > 0 ? '+' : '') + fixed(x, decimals) : '';
}
function points(x) {
  return isNumber(x) ? signed(100 * x, 2) : '';
}
function share(part, whole) {
  return whole > 0 ? fixed(100 * part / whole, 1) + ' %' : '';
}
function days(t) {
  return t * 365 < 10 ? fixed(t * 365, 1) : fixed(t * 365, 0);
}

const MONTHS = [
  'January', 'February', 'March', 'April', 'May', 'June', 'July', 'August', 'September', 'October',
  'November', 'December'
];
// "14 March 2031" of an ISO instant, by its own clock.
function longDate(instant) {
  const [year, month, day] = instant.slice(0, 10).split('-').map(Number);
  return day + ' ' + MONTHS[month - 1] + ' ' + year;
}
function clockOf(instant, zone) {
  return instant.slice(11, 16) + ' ' + (zone || 'UTC' + instant.slice(19).replace('Z', ''));
}

// Which reason, in words of the ledger.
function reasonWord(reason) {
  return REASONS[reason][0] || 'used';
}
function stateOf(reason) {
  return REASONS[reason][1];
}
// [reason, n, reason, n, ...] to totals by state and by reason.
function tally(flat) {
  const by = {used: 0, spare: 0, dropped: 0, reasons: new Map()};
  for (let i = 0; i < flat.length; i += 2) {
    by[stateOf(flat[i])] += flat[i + 1];
    by.reasons.set(flat[i], flat[i + 1]);
  }
  by.read = by.used + by.spare + by.dropped;
  return by;
}

function readData() {
  const data = JSON.parse(document.getElementById('data').textContent);
  document.getElementById('bare').remove();
  return data;
}

// ---- Light and dark ----------------------------------------------------------------------------

const THEMES = ['auto', 'light', 'dark'];
function storedTheme() {
  try {
    return THEMES.includes(localStorage.duskgridTheme) ? localStorage.duskgridTheme : 'auto';
  } catch (_) {
    return 'auto';
  }
}
const themeWatchers = [];
const darkSystem = matchMedia('(prefers-color-scheme: dark)');
function shadeTheme() {
  const root = document.documentElement.dataset;
  root.shade = root.theme === 'auto' ? (darkSystem.matches ? 'dark' : 'light') : root.theme;
  themeWatchers.forEach((watch) => watch());
}
function setTheme(theme) {
  document.documentElement.dataset.theme = theme;
  try {
    localStorage.duskgridTheme = theme;
  } catch (_) { /* a page may not be allowed to keep it */
  }
  shadeTheme();
}
function themeSwitch() {
  const group = el('div', {class: 'choice', role: 'radiogroup', 'aria-label': 'Light or dark'});
  for (const theme of THEMES) {
    group.append(
        el('label', {}, el('input', {
             type: 'radio',
             name: 'theme',
             value: theme,
             checked: theme === document.documentElement.dataset.theme,
             onchange: () => setTheme(theme)
           }),
           el('span', {}, theme)));
  }
  return group;
}
setTheme(storedTheme());
darkSystem.addEventListener('change', shadeTheme);

// A switch between a few words: [[value, text], ...].
function choice(label, name, options, value, change) {
  const group = el('div', {class: 'choice', role: 'radiogroup', 'aria-label': label});
  for (const [key, text] of options) {
    group.append(el(
        'label', {},
        el('input',
           {type: 'radio', name, value: key, checked: key === value, onchange: () => change(key)}),
        el('span', {}, text)));
  }
  return group;
}
// Something on or off.
function toggle(text, on, change, title) {
  return el(
      'label', {class: 'toggle', title},
      el('input',
         {type: 'checkbox', checked: on, onchange: (event) => change(event.target.checked)}),
      el('span', {}, text));
}

// ---- Said to those who do not see --------------------------------------------------------------

const spoken = el('div', {class: 'unseen', 'aria-live': 'polite'});
function say(text) {
  spoken.textContent = text;
}

// ---- Tables ------------------------------------------------------------------------------------

// A plain table. Cells are texts or nodes; heads that start with ">" hold numbers.
function plainTable(head, rows, caption) {
  const right = head.map((text) => text.startsWith('>'));
  const cell = (tag) => (value, i) =>
      el(tag, {class: right[i] ? 'number' : null, scope: tag === 'th' ? 'col' : null},
         tag === 'th' ? value.replace(/^>/, '') : value);
  return el(
      'div', {class: 'scroll'},
      el('table', {}, caption ? el('caption', {}, caption) : null,
         el('thead', {}, el('tr', {}, head.map(cell('th')))),
         el('tbody', {}, rows.map((row) => el('tr', {}, row.map(cell('td')))))));
}

// A table that draws only what is in sight, for thousands of rows. Columns: {key, head, width,
// number, cell(row) -> text or nodes, sort(row) -> value, down (first sorted downwards), narrow
// (class on narrow screens)}. Sorting keeps the order of rows that are even.
class LongTable {
  constructor(options) {
    this.options = options;
    this.rows = options.rows;
    this.current = -1;
    this.sorted = null;
    this.drawn = new Map();
    this.build();
    this.order();
  }
  build() {
    const {columns, label} = this.options;
    this.heads = columns.map(
        (column, i) =>
            el('div', {role: 'columnheader', class: this.classOf(column), 'aria-sort': 'none'},
               column.sort ? el('button', {type: 'button', onclick: () => this.sortBy(i)},
                                column.head, el('span', {class: 'arrow', 'aria-hidden': 'true'})) :
                             column.head));
    this.head = el('div', {role: 'row', class: 'line head'}, this.heads);
    this.space = el('div', {class: 'space', role: 'rowgroup'});
    this.empty = el('p', {class: 'empty', hidden: true}, this.options.empty || 'None.');
    this.node =
        el('div', {
          class: 'long ' + (this.options.class || ''),
          role: 'grid',
          tabindex: '0',
          'aria-label': label,
          onscroll: () => this.draw(),
          onkeydown: (event) => this.keys(event)
        },
           this.head, this.space, this.empty);
    this.node.style.setProperty('--columns', columns.map((c) => c.width).join(' '));
    // No narrower than the least widths of its columns with the gaps between: below that it
    // scrolls.
    const least = (c) => parseFloat(c.width.replace('minmax(', ''));
    this.node.style.setProperty(
        '--least', columns.reduce((sum, c) => sum + least(c) + 0.7, 0.9) + 'rem');
    new ResizeObserver(() => this.draw(true)).observe(this.node);
    addEventListener('beforeprint', () => this.draw(true, true));
    addEventListener('afterprint', () => this.draw(true));
  }
  classOf(column) {
    return (column.number ? 'number ' : '') + (column.narrow || '');
  }
  show(rows) {
    this.rows = rows;
    this.current = -1;
    this.node.scrollTop = 0;
    this.order();
  }
  sortBy(i) {
    const first = this.options.columns[i].down ? -1 : 1;
    const back = this.sorted && this.sorted.column === i && this.sorted.sign === first;
    const off = this.sorted && this.sorted.column === i && this.sorted.sign !== first;
    this.sorted = off ? null : {column: i, sign: back ? -first : first};
    this.order();
    say(off ? 'in the order of concern' : 'sorted by ' + this.options.columns[i].head);
  }
  order() {
    this.shown = this.rows.slice();
    if (this.sorted) {
      const {column, sign} = this.sorted;
      const value = this.options.columns[column].sort;
      const keyed = this.shown.map((row, i) => [value(row), i, row]);
      const none = (x) => x === null || x === undefined || x === '';
      keyed.sort(
          ([a, i], [b, j]) => none(a) || none(b) ? (none(a) - none(b)) || i - j :
                                                   (a < b     ? -sign :
                                                        a > b ? sign :
                                                                i - j));
      this.shown = keyed.map((k) => k[2]);
    }
    this.heads.forEach(
        (head, i) => head.setAttribute(
            'aria-sort',
            !this.sorted || this.sorted.column !== i ? 'none' :
                this.sorted.sign > 0                 ? 'ascending' :
                                                       'descending'));
    this.node.setAttribute('aria-rowcount', this.shown.length + 1);
    this.empty.hidden = this.shown.length > 0;
    this.draw(true);
  }
  height() {
    return parseFloat(getComputedStyle(this.node).getPropertyValue('--row')) || 32;
  }
  draw(afresh, all) {
    const row = this.height(), top = this.node.scrollTop, beyond = 6;
    const from = all ? 0 : Math.max(0, Math.floor(top / row) - beyond);
    const most = all ? 400 : Math.ceil((this.node.clientHeight || 600) / row) + 2 * beyond;
    const to = Math.min(this.shown.length, from + most);
    this.space.style.height = (all ? to : this.shown.length) * row + 'px';
    if (afresh) {
      this.space.replaceChildren();
      this.drawn.clear();
    }
    for (const [i, node] of this.drawn)
      if (i < from || i >= to) {
        node.remove();
        this.drawn.delete(i);
      }
    for (let i = from; i < to; i++)
      if (!this.drawn.has(i)) this.drawn.set(i, this.line(i, row));
    this.drawn.forEach((node, i) => node.classList.toggle('current', i === this.current));
  }
  line(i, height) {
    const node =
        el('div', {
          role: 'row',
          class: 'line',
          id: this.options.id + '-' + i,
          'aria-rowindex': i + 2,
          onclick: () => {
            this.current = i;
            this.draw();
          }
        },
           this.options.columns.map(
               (column) =>
                   el('div', {role: 'gridcell', class: this.classOf(column)},
                      column.cell(this.shown[i]))));
    node.style.transform = 'translateY(' + i * height + 'px)';
    this.space.append(node);
    return node;
  }
  keys(event) {
    if (event.target !== this.node) return;
    const page = Math.max(1, Math.floor(this.node.clientHeight / this.height()) - 2);
    const step = {
      ArrowDown: 1,
      ArrowUp: -1,
      PageDown: page,
      PageUp: -page,
      Home: -Infinity,
      End: Infinity
    }[event.key];
    if (event.key === 'Enter' && this.current >= 0 && this.options.open)
      this.options.open(this.shown[this.current]);
    if (step === undefined || this.shown.length === 0) return;
    event.preventDefault();
    this.current = Math.max(
        0,
        Math.min(
            this.shown.length - 1, (this.current < 0 && isFinite(step) ? 0 : this.current + step)));
    this.reveal();
  }
  reveal() {
    const row = this.height(), top = this.current * row, head = this.head.offsetHeight;
    const room = this.node.clientHeight - head;
    if (top < this.node.scrollTop) this.node.scrollTop = top;
    if (top + row > this.node.scrollTop + room) this.node.scrollTop = top + row - room;
    this.draw();
    this.node.setAttribute('aria-activedescendant', this.options.id + '-' + this.current);
  }
}

// ---- Parts of both pages -----------------------------------------------------------------------

function section(id, title, note, ...children) {
  return el(
      'section', {id, 'aria-labelledby': id + '-title'}, el('h2', {id: id + '-title'}, title),
      note ? el('p', {class: 'note'}, note) : null, children);
}

// A bar for every reason that occurs, the largest as wide as there is room. With `pick`, buttons.
function reasonBars(by, pick) {
  const list = el('ul', {class: 'bars'});
  const entries = [...by.reasons].sort((a, b) => (a[0] > 0) - (b[0] > 0) || b[1] - a[1]);
  const most = Math.max(1, ...entries.map((entry) => entry[1]));
  for (const [reason, n] of entries) {
    const fill = el('span', {class: 'fill ' + stateOf(reason)});
    fill.style.width = Math.max(0.6, 100 * n / most) + '%';
    const inside = [
      el('span', {class: 'what'}, reasonWord(reason),
         reason > 0 ? el('small', {}, stateOf(reason)) : null),
      el('span', {class: 'rail'}, fill), el('span', {class: 'n'}, count(n))
    ];
    const title = reason > 0 ? REASONS[reason][2] : 'in the fit';
    list.append(
        el('li', {},
           pick ? el('button', {
             type: 'button',
             title,
             'data-reason': reasonWord(reason),
             onclick: () => pick(reason)
           },
                     inside) :
                  el('div', {title}, inside)));
  }
  return list;
}
