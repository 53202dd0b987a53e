"""The formulas of the Method page, LaTeX here and MathML in the site (no script sets them)."""

from __future__ import annotations

import re
from functools import cache
from html import unescape

from latex2mathml.converter import convert
from markupsafe import Markup

FORMULAS: dict[str, str] = {
    "strain": r"\varepsilon=\frac{L-L_0}{L_0},\qquad \lambda=\frac{L}{L_0}=1+\varepsilon",
    "full_scale_output": r"\text{FSO}=\left|\hat y(\varepsilon_{\text{full}})-\hat y(0)\right|"
    r"=|b|\,\varepsilon_{\text{full}}",
    "strain_equivalent": r"\Delta\varepsilon=\frac{\Delta y}{\beta_1(\varepsilon)}",
    "reading_mean": r"\bar y=\frac{1}{n}\sum_{t=1}^{n}y_t",
    "standard_error": r"u^2(\bar y)=\max\left(\frac{s^2\tau}{n},\ \frac{\delta^2}{12}\right),"
    r"\qquad \tau=1+2\sum_{k=1}^{K}\left(1-\frac{k}{n}\right)\rho_k,\qquad n_{\text{eff}}=\frac{n}{\tau}",
    "positive_sequence": r"\rho_{2j}+\rho_{2j+1}>0\quad\text{for every}\ j\le J,\qquad K=2J+1",
    "run_line": r"y_i=a_r+b_r\,(x_i-\bar x)+e_i,\qquad \hat\theta_{sr}=(a_r,b_r)^{\top}",
    "sensor_line": r"\hat\theta=\frac{1}{S}\sum_{s=1}^{S}\hat\theta_s,\qquad "
    r"\hat\theta_s=\frac{1}{R_s}\sum_{r=1}^{R_s}\hat\theta_{sr},\qquad "
    r"\operatorname{Cov}(\hat\theta)=\frac{1}{S}\left(\Sigma_{\text{mounting}}+"
    r"\frac{\Sigma_{\text{run}}+\Sigma_{\text{noise}}}{R_s}\right)",
    "weights": r"w_i\propto\frac{1}{\tau^2(x_i)+u^2(\bar y_i)},\qquad \tau^2(x)=\exp(\alpha+\beta x)",
    "gauge_factor": r"\text{GF}=\frac{1}{C_0}\frac{\text{d}C}{\text{d}\varepsilon}=\frac{b}{a}",
    "gauge_factor_uncertainty": r"\frac{u^2(\text{GF})}{\text{GF}^2}=\frac{u^2(b)}{b^2}+\frac{u^2(a)}{a^2}"
    r"-\frac{2\,u(a,b)}{a\,b}",
    "linearity": r"\text{linearity}=100\ \%\cdot"
    r"\frac{\max_i\left|y_i-\hat y_{\text{line}}(x_i)\right|}{\text{FSO}}",
    "lack_of_fit": r"F=\frac{\text{MS}(\text{level})}{\text{MS}(\text{level}\times\text{run})}",
    "quadratic": r"y=a+b\,x+q\,(x-\bar x)^2+e",
    "repeatability": r"s_r^2=\frac{\sum_{k}\sum_{r}(y_{kr}-\bar y_{k})^2}{\sum_{k}(R_k-1)}",
    "hysteresis": r"h_k=\frac{1}{R_k}\sum_{r}\left(y^{\text{rising}}_{kr}-y^{\text{falling}}_{kr}\right),"
    r"\qquad "
    r"h_k\pm c\,u(h_k)\quad\text{for all levels}\ k\ \text{together}",
    "inverse": r"\hat x=\frac{y-a}{b}",
    "inverse_limits": r"(y-a-b\,x)^2=t^2\left[V_a+2xV_{ab}+x^2V_b+\left(v_0+2xc+x^2v_1\right)"
    r"+s_{\text{lof}}^2+w^2+\frac{\sigma^2}{m}\right]",
    "inverse_exists": r"g=\frac{t^2\,(V_b+v_1)}{b^2}<1",
    "reference_covariance": r"\text{Cov}(x_i,x_j)=(1+\varepsilon_i)(1+\varepsilon_j)\left[u_{\text{scale}}^2+"
    r"\frac{u_{L_0}^2}{L_0^2}\right]+\frac{u_{\text{zero}}^2}{L_0^2}"
    r"+d_i\,d_j\,\frac{u_{\text{backlash}}^2}{4L_0^2},\qquad "
    r"\frac{\partial\varepsilon}{\partial L_0}=-\frac{1+\varepsilon}{L_0}",
    "plates": r"C=\epsilon_0\epsilon_r\frac{l\,w}{t},\qquad l\,w\,t=l_0w_0t_0",
    "plates_uniaxial": r"l=\lambda l_0,\ w=\lambda^{-1/2}w_0,\ t=\lambda^{-1/2}t_0"
    r"\quad\Rightarrow\quad C=\lambda\,C_0",
    "plates_width_kept": r"l=\lambda l_0,\ w=w_0,\ t=\lambda^{-1}t_0\quad\Rightarrow\quad C=\lambda^{2}C_0",
    "plates_biaxial": r"l=\lambda l_0,\ w=\lambda w_0,\ t=\lambda^{-2}t_0"
    r"\quad\Rightarrow\quad C=\lambda^{4}C_0",
    "stretch_exponent": r"\frac{C}{C_0}=\lambda^{p},\qquad p=\frac{\text{d}\ln C}{\text{d}\ln\lambda}",
    "parasitic": r"C=C_p+C_s\lambda^{p_s}\quad\Rightarrow\quad p\approx p_s\,\frac{C_s}{C_s+C_p}"
    r"\ \text{near}\ \lambda=1",
    "nested": r"y=(\beta_{0}+m_0+s_0+q_0+r_0)+(\beta_{1}+m_1+s_1+q_1+r_1)\,\varepsilon+d_{k}+e",
    "nested_covariance": r"(m_0,m_1)^{\top}\sim\text{N}(0,\Sigma_{\text{module}}),\quad "
    r"(s_0,s_1)^{\top}\sim\text{N}(0,\Sigma_{\text{sensor}}),\quad\dots,\quad e\sim\text{N}(0,\sigma^2)",
    "restricted_likelihood": r"-2\,\ell_{\text{R}}=\log|V|+\log|X^{\top}V^{-1}X|"
    r"+(y-X\hat\beta)^{\top}V^{-1}(y-X\hat\beta)+(N-p)\log 2\pi",
    "profiled": r"\hat\sigma^2=\frac{(y-X\hat\beta)^{\top}V_{\theta}^{-1}(y-X\hat\beta)}{N-p},"
    r"\qquad V=\sigma^2V_{\theta},\quad \Sigma=\sigma^2\theta\theta^{\top},\quad\theta_{kk}\ge 0",
    "component_in_strain": r"s_{\varepsilon}^2(\varepsilon)="
    r"\frac{\Sigma_{00}+2\,\Sigma_{01}\,\varepsilon+\Sigma_{11}\,\varepsilon^2}{\beta_1^2}",
    "share": r"\text{share}=\frac{s_{\varepsilon,\text{level}}^2}{\sum_{\text{levels}}s_{\varepsilon}^2}",
    "profile_interval": r"\left\{\sigma:\ D(\sigma)-D(\hat\sigma)\le\chi^2_{1;\,0.95}=3.841\right\},"
    r"\qquad D(\sigma)=\min_{\text{all others}}\left(-2\,\ell_{\text{R}}\right)",
    "modified_large_sample": r"\hat\gamma=\sum_{q}c_q\,\text{MS}_q,\qquad "
    r"\hat\gamma-\sqrt{\sum_{q}\sum_{t}G_{qt}\,c_q c_t\,\text{MS}_q\,\text{MS}_t}\ \le\ \gamma\ \le\ "
    r"\hat\gamma+\sqrt{\sum_{q}\sum_{t}H_{qt}\,c_q c_t\,\text{MS}_q\,\text{MS}_t}",
    "new_sensor": r"\hat y(x)\pm t_{\nu;\,0.975}\,u,\qquad u^2=u^2(\hat y(x))+"
    r"\sum_{\text{levels}}z^{\top}\Sigma z+\sigma^2,\qquad z=(1,x)^{\top}",
    "satterthwaite": r"\nu=\frac{2\,\hat v^2}{\text{Var}(\hat v)}",
    "effort": r"s_{\varepsilon}^2=\frac{1}{N}\sum_{i}(\hat x_i-x_i)^2,\qquad "
    r"\hat x_i=\frac{y_i-a}{b}\ \text{with the line of the effort}",
    "conformity": r"p_c=P\left(\eta\le L\right)=F_{\nu}\left(\frac{L-\hat\eta}{u(\hat\eta)}\right)",
    "budget": r"u^2=\sum_{g}u_g^2,\qquad u_g^2=\sum_{i\in g}c_i^2\,u_i^2,\qquad "
    r"u_i=\frac{a_i}{\text{divisor}_i}",
    "expanded": r"U=t_{\nu_{\text{eff}};\,0.975}\;u",
    "welch": r"\nu_{\text{eff}}=\frac{u^4}{\sum_{g}u_g^4/\nu_g}",
    "uniform": r"\Delta\ \text{uniform on}\ [0,\,D]\quad\Rightarrow\quad "
    r"\sqrt{\text{E}\,\Delta^2}=\frac{|D|}{\sqrt{3}},\qquad "
    r"D=s_{10}\log_{10}\frac{T}{t_0}\ \text{or}\ s_{\text{h}}\,(T-t_0)",
    "generation_difference": r"\hat\mu_2-\hat\mu_1\pm t_{\nu;\,0.975}\sqrt{V_1+V_2},\qquad "
    r"\nu=\frac{(V_1+V_2)^2}{V_1^2/\nu_1+V_2^2/\nu_2},\qquad \nu_g\le M_g-1",
    "fieller_ratio": r"\left\{\rho:\ (\hat\mu_2-\rho\,\hat\mu_1)^2\le t_{\nu;\,0.975}^2"
    r"\left(V_2+\rho^2 V_1\right)\right\}",
    "two_one_sided": r"t_{\text{low}}=\frac{d+\delta}{\sqrt{V_1+V_2}}>t_{\nu;\,0.95}\quad\text{and}\quad "
    r"t_{\text{high}}=\frac{\delta-d}{\sqrt{V_1+V_2}}>t_{\nu;\,0.95},\qquad d=\hat\mu_2-\hat\mu_1",
    "plan_variance": r"V=\frac{1}{M}\left(\sigma_m^2+\frac{\sigma_q^2}{Q}+\frac{\sigma_c^2}{QR}"
    r"+\frac{\sigma_s^2}{S}+\frac{\sigma_e^2}{SQ}+\frac{\sigma_r^2}{SQR}\right)",
    "plan_power": r"P=P\left(\left|t'_{\nu}(\theta)\right|>t_{\nu;\,0.975}\right),\qquad "
    r"\theta=\frac{\Delta}{\sqrt{2V}},\qquad \nu=2(M-1)",
    "allocation": r"S=\sqrt{\frac{c_m\,\sigma_s^2}{c_s\,\sigma_m^2}},\qquad "
    r"R=\sqrt{\frac{c_s\,\sigma_r^2}{c_r\,\sigma_s^2}}",
    "autocorrelation": r"r_1=\frac{\sum_{i}e_i\,e_{i+1}}{\sum_{i}e_i^2}",
    "influence": r"y=a+b\,\varepsilon+c\,p+d\,\varepsilon\,p+e",
    "influence_error": r"\Delta\varepsilon(p)=\frac{(c+d\,\varepsilon)\,p}{b},\qquad "
    r"\frac{u^2(\Delta\varepsilon)}{\Delta\varepsilon^2}=\frac{u^2(c+d\,\varepsilon)}{(c+d\,\varepsilon)^2}"
    r"+\frac{u^2(b)}{b^2}",
    "compensation": r"y_{\text{corrected}}=y-(\hat c+\hat d\,\varepsilon)\,p,\qquad "
    r"s=\frac{1}{|b|}\sqrt{\frac{\sum_{j}\sum_{i}(r_{ij}-\bar r_{j})^2}{N-J}}",
    "cross_axis": r"S_{\times}=100\ \%\cdot\frac{\partial y/\partial\varepsilon_{\text{across}}}"
    r"{\partial y/\partial\varepsilon_{\text{along}}}",
    "temperature": r"\alpha_{\text{zero}}=\frac{c}{y_0},\qquad \alpha_{\text{sensitivity}}=\frac{d}{b}",
    "shape_adjustment": r"(l-d(x))^{\top}\,\Sigma^{-1}(l-d(x))\ \to\ \min,\qquad "
    r"\text{Cov}(\hat x)=(A^{\top}\Sigma^{-1}A)^{-1}\ \text{in the datum},\qquad "
    r"A=\frac{\partial d}{\partial x}",
    "inner_constraints": r"B^{\top}(\hat x-x_0)=0\quad\Rightarrow\quad "
    r"\operatorname{tr}\text{Cov}(\hat x)\ \text{least},\qquad B:\ \text{shift and rotation}",
    "rigid_fit": r"\sum_{k}\left|\hat x_k-(R\,x_k+t)\right|^2\to\min,\qquad R\ \text{a rotation}",
    "extra_sd": r"l-l_{\text{known}}\sim\text{N}(0,\ \Sigma+\Sigma_{\text{known}}+\tau^2 I)",
    "redundancy": r"r=E-(2n-3),\qquad r_i=\left(Q_{vv}\Sigma^{-1}\right)_{ii},\qquad \sum_i r_i=r",
    "chi_square": r"\chi^2=v^{\top}\Sigma^{-1}v,\qquad v=d(\hat x)-l,\qquad \hat\sigma_0^2=\frac{\chi^2}{r}",
    "tau_test": r"w_i=\frac{(\Sigma^{-1}v)_i}{\sqrt{(\Sigma^{-1}Q_{vv}\Sigma^{-1})_{ii}}},\qquad "
    r"\tau_i=\frac{w_i}{\hat\sigma_0},\qquad "
    r"\nabla_i=-\frac{(\Sigma^{-1}v)_i}{(\Sigma^{-1}Q_{vv}\Sigma^{-1})_{ii}}",
    "ellipse": r"a,b=\sqrt{\frac{s_x^2+s_y^2}{2}\pm\sqrt{\frac{(s_x^2-s_y^2)^2}{4}+s_{xy}^2}},\qquad "
    r"\tan 2\varphi=\frac{2s_{xy}}{s_x^2-s_y^2},\qquad \sqrt{\chi^2_{2;\,0.95}}=2.45",
    "cook": r"D_i=\frac{e_i^2}{p\,s^2}\,\frac{h_{ii}}{(1-h_{ii})^2}",
}
"""Formulas by name; a template writes ``{{ formulas.gauge_factor }}``."""


WIDE = 24
"""Signs of a formula above which it may not fit a narrow screen."""


@cache
def mathml(latex: str) -> Markup:
    """Return a displayed formula as MathML, without the style attributes that the content policy forbids.

    A formula too wide for a narrow screen can be reached by keyboard, so that it can be scrolled.
    """
    made = convert(latex, display="block")
    wide = len(unescape(re.sub(r"<[^>]+>", "", made))) > WIDE
    return Markup(made.replace("<math ", '<math tabindex="0" ', 1) if wide else made)


def rendered_formulas() -> dict[str, Markup]:
    """Return every formula of :data:`FORMULAS` as MathML, by name."""
    return {name: mathml(latex) for name, latex in FORMULAS.items()}
